package sidecar

// What can identify a person, and how anything from a file may be shown.
//
// Privacy rests on allow-lists: only keys named in this package are read, used
// or carried, so an identifying field that the list below does not know is left
// behind all the same. The list serves the warning alone. It follows the
// attributes that the DICOM standard, PS3.15 Annex E (Attribute Confidentiality
// Profiles), removes or replaces, as far as they can tell a person, staff, a
// place, a device or a day [from memory], and everyday words for the same.
// ProtocolName and SeriesDescription, which that profile also cleans, are not
// warned of: nearly every converted file has them, and as a rule they name the
// scan. They are not carried either.

import (
	"fmt"
	"regexp"
	"strings"
	"unicode/utf8"

	"github.com/tidwall/gjson"

	"evenkeel/fault"
)

// identifyingKeys are compared after folding (see foldKey).
var identifyingKeys = setOf(
	// Numbers and names of a visit or an examination lead back to a register.
	"accessionnumber", "admissionid", "studyid", "studydescription", "procedurestepdescription",
	"performedprocedurestepid", "performedprocedurestepdescription", "requestedprocedureid",
	"requestedproceduredescription", "scheduledprocedurestepid", "fillerordernumberimagingservicerequest",
	"placerordernumberimagingservicerequest", "medicalrecordlocator", "issuerofpatientid", "insuranceplanidentification",
	// People. StudyDescription above often begins with an investigator's name.
	"personname", "persontelephonenumbers", "personaddress", "responsibleperson", "responsibleorganization",
	"countryofresidence", "regionofresidence", "currentpatientlocation", "ethnicgroup", "ethnicgroups", "occupation", "militaryrank",
	"branchofservice", "medicalalerts", "allergies", "smokingstatus", "pregnancystatus", "additionalpatienthistory",
	"imagecomments", "studycomments", "requestattributessequence", "reviewername", "contentcreatorname",
	"subjectname", "subjectid", "participantname", "participantid", "firstname", "lastname", "surname", "fullname", "familyname", "givenname",
	"email", "emailaddress", "experimenter", "technologist", "technician", "radiographer", "scannedby", "performedby",
	"socialsecuritynumber", "ssn", "nationalid", "dob", "age", "sex", "gender",
	// Places and devices.
	"stationname", "scheduledstationname", "performedstationname", "gantryid", "detectorid", "deviceid",
	"performedlocation", "hospital", "hospitalname",
	// Times of day; dates are caught by their ending.
	"studytime", "seriestime", "acquisitiontime", "contenttime", "instancecreationtime", "performedprocedurestepstarttime",
	"performedprocedurestependtime", "scheduledprocedurestepstarttime", "scantime", "starttimeofday", "timezoneoffsetfromutc",
	"framereferencetimestamp", "timestamp", "acquisitiontimestamp",
)

// identifyingParts mark a key that contains them.
var identifyingParts = []string{"physician", "institution", "operator", "birth", "telephone", "serialnumber", "accession", "patientid", "patientname"}

// harmlessPatientKeys begin with "patient" and describe how a body lay.
var harmlessPatientKeys = setOf("patientposition", "patientorientation", "patientorientationcodesequence", "patientgantryrelationshipcodesequence")

// identifyingTags are DICOM tags, as the DICOM JSON model uses them for keys
// (PS3.18 Annex F; PS3.6 for the numbers [from memory]). Group 0010 is the
// patient and taken whole.
var identifyingTags = setOf(
	"00080012", "00080013", "00080014", "00080018", "00080020", "00080021", "00080022", "00080023", "0008002a", "00080030", "00080031", "00080032", "00080033",
	"00080050", "00080080", "00080081", "00080082", "00080090", "00080092", "00080094", "00081010", "00081030", "00081040", "00081048", "00081050", "00081060", "00081070",
	"00181000", "00181002", "0020000d", "0020000e", "00200010", "00200052", "00204000",
)

func setOf(words ...string) map[string]bool {
	m := make(map[string]bool, len(words))
	for _, w := range words {
		m[w] = true
	}
	return m
}

// foldKey drops case and everything but ASCII letters and digits, so that
// "Patient's Name", "patient_name" and "(0010,0010)" are recognised.
func foldKey(key string) string {
	var b strings.Builder
	for i := 0; i < len(key); i++ {
		switch c := key[i]; {
		case c >= 'a' && c <= 'z', c >= '0' && c <= '9':
			b.WriteByte(c)
		case c >= 'A' && c <= 'Z':
			b.WriteByte(c | 0x20)
		}
	}
	return b.String()
}

var tagKey = regexp.MustCompile(`^[0-9a-f]{8}$`)

// identifies says whether a field of this name can identify a person, alone or
// together with others.
func identifies(key string) bool {
	k := foldKey(strings.ReplaceAll(key, "'s", ""))
	switch {
	case identifyingKeys[k]:
		return true
	case strings.HasPrefix(k, "patient"):
		return !harmlessPatientKeys[k]
	case strings.HasPrefix(k, "otherpatient"):
		return true
	case tagKey.MatchString(k):
		return identifyingTags[k] || strings.HasPrefix(k, "0010")
	// Unique identifiers hold a day and a device.
	case endsAs(k, "uid", "fluid", "liquid"), strings.HasSuffix(k, "uids"):
		return true
	case endsAs(k, "date", "update", "candidate", "validate", "mandate"), strings.HasSuffix(k, "datetime"):
		return true
	}
	for _, p := range identifyingParts {
		if strings.Contains(k, p) {
			return true
		}
	}
	return false
}

// endsAs says whether the key ends in a word, and not as part of one of the others.
func endsAs(k, word string, others ...string) bool {
	for _, o := range others {
		if strings.HasSuffix(k, o) {
			return false
		}
	}
	return strings.HasSuffix(k, word)
}

// mostPrivate keeps a dump of a whole header from filling the screen, and the
// search for line numbers short; the warning is clear long before.
const mostPrivate = 100

func privateFaults(src Source, seen []sighting) []fault.Fault {
	var faults []fault.Fault
	shown := map[string]bool{}
	for _, s := range seen {
		key := showKey(s.key)
		if shown[key] {
			continue
		}
		shown[key] = true
		if len(faults) == mostPrivate {
			return append(faults, fault.New("private-field", src.Name, "", fmt.Sprintf("more than %d such keys", mostPrivate),
				"no field that can identify a person, alone or with others", "remove such fields from the dataset before sharing it"))
		}
		where := ""
		if s.nested {
			where = ", inside another field"
		}
		faults = append(faults, fault.New("private-field", src.Name, key,
			fmt.Sprintf("%s: the key %s%s (its value is not shown)", placeOf(src.Data, s.at), key, where),
			"no field that can identify a person, alone or with others",
			"remove the field from the dataset before sharing it; evenkeel does not use it and copies it nowhere"))
	}
	return faults
}

// plainKey is what metadata keys look like. Anything else might be text that
// slipped into a key's place.
var plainKey = regexp.MustCompile(`^\(?[A-Za-z0-9][A-Za-z0-9_.,-]{0,63}\)?$`)

func showKey(key string) string {
	if plainKey.MatchString(key) {
		return key
	}
	return fmt.Sprintf("a key of %s", count(utf8.RuneCountInString(key), "character"))
}

func count(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}

// mostDigits is far above what a double needs (17), so only nonsense is cut.
const mostDigits = 40

func showNumber(raw string) string {
	if len(raw) > mostDigits {
		return raw[:mostDigits] + "..."
	}
	return raw
}

// describe says what a value is: numbers and JSON's own words as they stand,
// everything else by kind and size only.
func describe(raw string) string {
	v := gjson.Parse(raw)
	switch v.Type {
	case gjson.String:
		if v.Str == "" {
			return "an empty string"
		}
		text := "a string of " + count(utf8.RuneCountInString(v.Str), "character")
		if looksNumeric(v.Str) {
			text += " that holds a number"
		}
		return text
	case gjson.Number:
		return showNumber(raw)
	case gjson.JSON:
		if v.IsObject() {
			return "an object"
		}
		n := len(v.Array())
		if n == 0 {
			return "an empty list"
		}
		return "a list of " + count(n, "value")
	default:
		return raw // true, false, null
	}
}

func looksNumeric(s string) bool {
	s = strings.TrimSpace(s)
	return s != "" && gjson.Valid(s) && gjson.Parse(s).Type == gjson.Number
}
