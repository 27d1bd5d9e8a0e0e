package sidecar

import (
	"fmt"
	"os"
	"strings"
	"testing"
)

// testdata/logbook.json is an invented sidecar full of identifying fields. Each
// secret is a word that appears nowhere else; other fields are wrong on purpose,
// so that as many faults as possible have a chance to tell.
var secrets = []string{"Ahab", "19180401", "Pequod", "Nantucket", "Starbuck", "Queequeg", "Ishmael", "Tashtego", "1851", "10:18:27", "7734", "1.2.840", "Rachel",
	"Moby", "whale", "Flask", "081Y", "Pip", "Stubb", "Dagg", "Bildad", "Peleg"}

func TestNothingPrivateComesOut(t *testing.T) {
	data, err := os.ReadFile("testdata/logbook.json")
	if err != nil {
		t.Fatal(err)
	}
	for _, s := range secrets {
		if !strings.Contains(string(data), s) {
			t.Errorf("the file does not hold %q: nothing would be tested", s)
		}
	}
	search := func(where, text string) {
		for _, s := range secrets {
			if strings.Contains(text, s) {
				t.Errorf("%s holds %q: %s", where, s, text)
			}
		}
	}
	warned := map[string]bool{}
	// The whole file, and every beginning of it: errors of syntax at any place.
	for end := len(data); end >= 0; end-- {
		text := string(data[:end])
		acq, faults := read(harbour, text)
		for _, f := range faults {
			search("a fault", fmt.Sprintf("%+v %s", f, f.Error()))
			if end == len(data) && f.ID == "private-field" {
				warned[f.Field] = true
			}
		}
		search("the acquisition", fmt.Sprintf("%+v", *acq))
	}
	for _, key := range []string{"PatientName", "PatientID", "PatientBirthDate", "PatientSex", "PatientAge", "PatientWeight", "StudyInstanceUID", "SeriesInstanceUID",
		"AccessionNumber", "InstitutionName", "InstitutionAddress", "InstitutionalDepartmentName", "DeviceSerialNumber", "StationName", "OperatorsName",
		"PerformingPhysicianName", "ReferringPhysicianName", "AcquisitionDateTime", "AcquisitionDate", "AcquisitionTime", "StudyDescription", "ImageComments",
		"OtherPatientNames", "patient_name", "00100010", "(0010,0030)", "ContentDate"} {
		if !warned[key] {
			t.Errorf("no private-field for %s", key)
		}
	}
	for key := range warned {
		if !identifies(key) {
			t.Errorf("private-field for %s", key)
		}
	}
}

// Keys of acquisition draw no warning, or the warning would be ignored.
func TestHarmlessKeys(t *testing.T) {
	keys := []string{"RepetitionTime", "EchoTime", "SliceTiming", "DelayTime", "TotalReadoutTime", "DwellTime", "InversionTime", "VolumeTiming", "AcquisitionDuration",
		"FrameAcquisitionDuration", "AcquisitionNumber", "SeriesNumber", "SeriesDescription", "ProtocolName", "PatientPosition", "SoftwareVersions", "Manufacturer",
		"ManufacturersModelName", "ImageOrientationPatientDICOM", "ReceiveCoilName", "Units", "TaskName", "StartTime", "CerebrospinalFluid", "LastUpdate", "Candidate",
		"MagneticFieldStrength", "BodyPart", "ImageType", "ConversionSoftware", "20101112"}
	for key := range carriedFields {
		keys = append(keys, key)
	}
	for _, key := range keys {
		if identifies(key) {
			t.Errorf("%s", key)
		}
	}
}

// A warning comes from every file that holds the field, overridden or not, and
// once from each.
func TestPrivateFieldOncePerFile(t *testing.T) {
	_, faults := read(harbour, `{"PatientID": 1, "x": {"PatientID": 2}}`, with([2]string{"PatientID", "3"}))
	if len(faults) != 2 || faults[0].File == faults[1].File || ids(faults) != "private-field private-field" {
		t.Errorf("\n%s", list(faults))
	}
}

// A file of nothing but such keys is answered briefly, and soon: the search for
// line numbers must not grow with the square of the file.
func TestManyPrivateFields(t *testing.T) {
	var b strings.Builder
	for i := range 200000 {
		fmt.Fprintf(&b, "\"x%dUID\": 1,\n", i)
	}
	_, faults := Merge([]Source{{leafName, []byte("{" + b.String() + `"z": 0}`)}})
	if len(faults) != mostPrivate+1 || !strings.Contains(faults[mostPrivate].Found, "more than 100") {
		t.Errorf("%d faults", len(faults))
	}
}
