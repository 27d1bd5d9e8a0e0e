#!/usr/bin/python3
"""Loads PROV-JSON documents with the prov library and prints as JSON, for each, what the model
holds: how many of each class and relation, the stages of the run, the values and their origins."""
import json
import sys
from collections import Counter

from prov import model

CLASSES = {
    model.ProvEntity: "Entity", model.ProvActivity: "Activity", model.ProvAgent: "Agent", model.ProvUsage: "Used",
    model.ProvGeneration: "Generated", model.ProvDerivation: "Derived", model.ProvCommunication: "Informed",
    model.ProvAssociation: "Associated",
}


def text(value):
    """A value as text, whether the library made a name, a literal or a string of it."""
    return value.value if isinstance(value, model.Literal) else str(value)


def one(thing, name):
    """The single value of an attribute."""
    (value,) = thing.get_attribute(name)
    return text(value)


def read(path):
    with open(path) as f:
        doc = model.ProvDocument.deserialize(f, format="json")
    records = doc.get_records()
    ids = {str(r.identifier): r for r in records if r.is_element()}
    if len(ids) != sum(r.is_element() for r in records):
        sys.exit(path + ": two things of one name")

    stages, values = [], []
    for name, r in sorted(ids.items()):
        kinds = {text(t) for t in r.get_asserted_types()}
        if "evenkeel:Stage" in kinds:
            if not isinstance(r, model.ProvActivity) or one(r, "dcterms:isPartOf") != "run:run":
                sys.exit(name + " is no part of the run")
            stages.append([one(r, "evenkeel:name"), one(r, "evenkeel:parameters"), one(r, "evenkeel:outcome")])
        if "evenkeel:Value" in kinds:
            (source,) = [ids[str(d.args[1])] for d in doc.get_records(model.ProvDerivation) if d.args[0] == r.identifier]
            if not any(u.args[1] == r.identifier for u in doc.get_records(model.ProvUsage)):
                sys.exit(name + " is not used")
            values.append([one(r, "evenkeel:key"), one(r, "prov:value"), one(r, "evenkeel:file"), one(source, "prov:location")])
    for r in records:
        if r.is_relation():
            for end in r.args:
                if isinstance(end, model.QualifiedName) and str(end) not in ids:
                    sys.exit(str(end) + " is not declared")
    counts = Counter(CLASSES[type(r)] for r in records)
    return {"Counts": counts, "Stages": stages, "Values": values}


json.dump([read(p) for p in sys.argv[1:]], sys.stdout)
