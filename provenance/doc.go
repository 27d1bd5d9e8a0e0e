// Package provenance writes, reads and audits the record of a run: what went
// in, what came out, what was told, what was used and what was done, so that
// anybody can check the files, or compute them again.
//
// A record is a document of the W3C provenance model (PROV-DM, Recommendation,
// 30 April 2013) in its JSON form (PROV-JSON, Member Submission, 24 April
// 2013). Digests are SHA-256 (FIPS 180-4), in lower-case hexadecimal.
//
// # The document
//
// Names of ours have the prefix evenkeel (https://evenkeel.example/ns#). Names
// of one record have the prefix run, https://evenkeel.example/run/ID#, where ID
// is derived from the record ([Record.ID]) and not drawn at random, so that the
// same work gives the same bytes. Objects of JSON that PROV cannot hold as
// attributes are literals of the type rdf:JSON. Every typed value is written
// {"$": "text", "type": ...}, the text being a string also for numbers, as
// PROV-JSON wants it.
//
//	entity    run:input-0001 ...   evenkeel:Input: prov:location (relative to the raw
//	                               dataset), evenkeel:role, evenkeel:sha256, evenkeel:bytes
//	          run:output-0001 ...  evenkeel:Output: the same, relative to the output dataset
//	          run:settings         prov:Plan: evenkeel:settings
//	          run:value-0001 ...   evenkeel:Value: evenkeel:key, prov:value, evenkeel:file
//	activity  run:run              evenkeel:Run: evenkeel:format, evenkeel:stem, evenkeel:dataset,
//	                               evenkeel:accepted, evenkeel:fault, and the log part
//	          run:stage-0001 ...   evenkeel:Stage: evenkeel:name, evenkeel:parameters,
//	                               evenkeel:outcome, dcterms:isPartOf run:run
//	agent     run:software         prov:SoftwareAgent: evenkeel:version, evenkeel:revision,
//	                               evenkeel:modified, evenkeel:goVersion, evenkeel:module
//
// used ties the run to its inputs and values, wasGeneratedBy the outputs to the
// run, wasDerivedFrom outputs to inputs and values to the file they came from,
// wasInformedBy each stage to the one before, and wasAssociatedWith the run and
// its stages to the software, with the settings as plan. Numbers in identifiers
// count from 1 without gaps and keep the order of the record.
//
// # The log part
//
// Two computations of the same inputs with the same settings and version give
// the same record but for five attributes of the activity run:run, which are
// the log part:
//
//	prov:startTime, prov:endTime, evenkeel:architecture, evenkeel:cpuFeature,
//	evenkeel:stageSeconds
//
// Nothing else holds a time, a machine or anything that changes between runs:
// they are the field [Record.Log].
//
// # Guarantees
//
//  1. [Record.Marshal] writes the same bytes for the same record; keys stand in
//     a fixed order.
//  2. What Marshal writes, [Parse] reads back as an equal record (embedded JSON
//     in its compact form, times in UTC, empty lists as nil).
//  3. Marshal and Parse refuse the same things: paths that are absolute, leave
//     their dataset, or hold a backslash; digests that are not 64 lower-case
//     hexadecimal digits; two inputs or two outputs of one path; embedded JSON
//     that is not JSON.
//  4. Parse is strict about what it knows and passes over keys, attributes and
//     records that it does not know. It never panics, whatever the bytes, and
//     every refusal is an [*Error] that names the record and the field.
//  5. Auditing follows no symbolic link that leads out of the output folder.
//     Links of the raw dataset are followed wherever they lead, as annexed
//     datasets need, but only for paths that a record names as inputs.
//
// That nothing in a record identifies a person is for the callers to see to:
// they copy sidecar fields by an allow-list.
package provenance
