package dataset

import (
	"errors"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// The order of BIDS schema 0.11.4-dev (release series 1.10), rules/entities,
// by key; 1.11 added tpl, cohort, atlas and scale, and must not reorder these.
func TestOrderKeepsThatOfTheSchema(t *testing.T) {
	want := strings.Fields("sub ses sample task tracksys acq nuc voi ce trc stain rec dir run mod echo flip inv mt part proc hemi space split " +
		"recording chunk seg res den label desc")
	got := slices.DeleteFunc(slices.Clone(Order), func(k string) bool { return !slices.Contains(want, k) })
	if diff := cmp.Diff(want, got); diff != "" {
		t.Error(diff)
	}
	if added := len(Order) - len(want); added != 4 {
		t.Errorf("%d keys beyond that schema, want 4", added)
	}
}

// Names printed in the standard: MRI page (task data, multi-echo), Derivatives
// (imaging, preprocessed data) and Common principles (inheritance).
func TestNamesOfTheStandard(t *testing.T) {
	for _, c := range []struct{ name, stem, suffix, ext string }{
		{"sub-01_task-cuedSGT_run-1_echo-1_bold.nii.gz", "sub-01_task-cuedSGT_run-1_echo-1", "bold", ".nii.gz"},
		{"sub-control01_task-nback_bold.json", "sub-control01_task-nback", "bold", ".json"},
		{"sub-01_ses-test_task-overtverbgeneration_run-1_bold.nii.gz", "sub-01_ses-test_task-overtverbgeneration_run-1", "bold", ".nii.gz"},
		{"sub-001_task-rest_run-1_space-MNI305_desc-preproc_bold.nii.gz", "sub-001_task-rest_run-1_space-MNI305_desc-preproc", "bold", ".nii.gz"},
		{"task-rest_bold.json", "task-rest", "bold", ".json"},
		{"bold.json", "", "bold", ".json"},
	} {
		n, err := ParseName(c.name)
		if err != nil {
			t.Error(err)
			continue
		}
		if n.Stem() != c.stem || n.Suffix != c.suffix || n.Ext != c.ext || n.String() != c.name {
			t.Errorf("%s: %q %q %q, back %s", c.name, n.Stem(), n.Suffix, n.Ext, n)
		}
	}
}

func TestNamesRefused(t *testing.T) {
	for _, c := range []struct{ name, reason string }{
		{"", "is empty"},
		{".sub-01_task-rest_bold.nii", "begins with a dot"},
		{"task-rest_sub-01_bold.nii", "entity sub stands after task"},
		{"sub-01_run-1_task-rest_bold.nii", "entity task stands after run"},
		{"sub-01_task-rest_desc-x_run-1_bold.nii", "entity run stands after desc"},
		{"sub-01_task-a_task-b_bold.nii", "task stands there twice"},
		{"sub-01_task-a_run-1_task-b_bold.nii", "task stands there twice"},
		{"sub-01_keel-1_bold.nii", `"keel" is no entity`},
		{"SUB-01_task-rest_bold.nii", `"SUB" is no entity`},
		{"sub-_task-rest_bold.nii", "is empty"},
		{"sub-01_task-two-back_bold.nii", "only letters, digits and +"},
		{"sub-01_task-r\u00eave_bold.nii", "only letters, digits and +"},
		{"sub-01_task-rest_run-A_bold.nii", "not a whole number"},
		{"sub-01_task-rest_echo-+1_bold.nii", "not a whole number"},
		{"sub-01_task-rest.nii", "no suffix"},
		{"sub-01_rest_bold.nii", "not a key-label pair"},
		{"sub-01__task-rest_bold.nii", "not a key-label pair"},
		{"_bold.nii", "begins with an underscore"},
		{"sub-01_task-rest_.nii", "its suffix"},
		{"sub-01_task-rest_bold (1).nii", "its suffix"},
		{"sub-01_task-rest_bold", "no extension"},
		{"sub-01_task-rest_bold.", "its extension"},
		{"sub-01_task-rest_bold..nii", "its extension"},
		{"sub-01_task-rest_bold.nii\n", "its extension"},
		{"sub-01_task-" + strings.Repeat("x", 300) + "_bold.nii", "255"},
	} {
		n, err := ParseName(c.name)
		var name *NameError
		if !errors.As(err, &name) || !strings.Contains(err.Error(), c.reason) {
			t.Errorf("%q: %v, %v; want a reason with %q", c.name, n, err, c.reason)
		}
		if err != nil && (strings.ContainsAny(err.Error(), "\n") || len(err.Error()) > 400) {
			t.Errorf("%q: message not fit to print: %q", c.name, err)
		}
	}
	// 255 bytes are allowed, 256 are not.
	if name := "sub-" + strings.Repeat("7", MaxName-len("sub-_bold.nii")) + "_bold.nii"; len(name) != 255 {
		t.Fatal(len(name))
	} else if _, err := ParseName(name); err != nil {
		t.Error(err)
	} else if _, err := ParseName("sub-7" + name[4:]); err == nil {
		t.Error("256 bytes accepted")
	}
}

var labels = rapid.StringMatching(`[0-9a-zA-Z+]{1,6}`)

func someEntities(keys []string) *rapid.Generator[Entities] {
	return rapid.Custom(func(t *rapid.T) Entities {
		var e Entities
		for _, k := range keys {
			if !rapid.Bool().Draw(t, k) {
				continue
			}
			label := labels.Draw(t, "label")
			if indexKeys[k] {
				label = rapid.StringMatching(`[0-9]{1,4}`).Draw(t, "index")
			}
			e = append(e, Entity{k, label})
		}
		return e
	})
}

func TestNameRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := Name{Entities: someEntities(Order[:12]).Draw(t, "entities"), Suffix: rapid.StringMatching(`[a-zA-Z0-9]{1,8}`).Draw(t, "suffix"),
			Ext: rapid.SampledFrom([]string{".nii", ".nii.gz", ".json", ".tsv"}).Draw(t, "ext")}
		got, err := ParseName(n.String())
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(n, got); diff != "" {
			t.Fatal(diff)
		}
	})
}

// Any permutation but the standard's is refused, and With restores the order.
func TestOnlyOneOrder(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		e := someEntities(Order).Draw(t, "entities")
		shuffled := Entities(rapid.Permutation(e).Draw(t, "order"))
		_, err := ParseEntities(shuffled.String())
		if same := slices.Equal(e, shuffled); same != (err == nil) {
			t.Fatalf("%s: same order %v, error %v", shuffled, same, err)
		}
		var rebuilt Entities
		for _, x := range shuffled {
			rebuilt = rebuilt.With(x.Key, x.Label)
		}
		if rebuilt.String() != e.String() {
			t.Fatalf("%s, want %s", rebuilt, e)
		}
	})
}

// A derivative name leads back to the entities of its raw file.
func TestDerivativeNameLeadsBack(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		e := someEntities(strings.Fields("ses task acq ce rec dir run echo chunk")).Draw(t, "entities").With("sub", "01")
		r := Run{Stem: e.String(), Dir: "sub-01/func", Entities: e}
		for _, o := range Outputs {
			rel, ok := strings.CutPrefix(OutputPath(r, o.Desc, o.Suffix, o.Exts[0]), "sub-01/func/")
			n, err := ParseName(rel)
			if !ok || err != nil {
				t.Fatal(rel, err)
			}
			desc, _ := n.Entities.Get("desc")
			if desc != o.Desc || n.Suffix != o.Suffix || n.Source().String() != r.Stem {
				t.Fatalf("%s: desc %s, suffix %s, source %s", rel, desc, n.Suffix, n.Source())
			}
		}
	})
}

func FuzzName(f *testing.F) {
	for _, s := range []string{"sub-01_task-rest_bold.nii.gz", "bold.json", "sub-01_task-a+b_run-007_desc-steady_pose.tsv", "_", "sub-\n_bold.nii", "a.b.c", "\xff.x"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		n, err := ParseName(s)
		if err != nil {
			var name *NameError
			if !errors.As(err, &name) || !cmp.Equal(n, Name{}) {
				t.Fatalf("%q: %v, %v", s, n, err)
			}
			return
		}
		if n.String() != s {
			t.Fatalf("%q came back as %q", s, n)
		}
		for i, e := range n.Entities {
			if i > 0 && slices.Index(Order, e.Key) <= slices.Index(Order, n.Entities[i-1].Key) {
				t.Fatalf("%q: order", s)
			}
		}
	})
}
