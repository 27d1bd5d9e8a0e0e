#!/usr/bin/python3
"""Reads a PROV-JSON document from standard input with the prov library, checks
that the library's own round trip keeps it, writes it to standard output, and
the number of records to standard error."""
import sys

from prov.model import ProvDocument

doc = ProvDocument.deserialize(content=sys.stdin.read(), format="json")
text = doc.serialize(format="json")
if ProvDocument.deserialize(content=text, format="json") != doc:
    sys.exit("the round trip changed the document")
sys.stdout.write(text)
sys.stderr.write("records %d\n" % len(doc.get_records()))
