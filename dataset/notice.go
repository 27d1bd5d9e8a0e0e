package dataset

import (
	"cmp"
	"fmt"
	"slices"
	"strings"
	"unicode"
)

// NoticeKind says what a [Notice] is about.
type NoticeKind string

const (
	// NoticeDescription: dataset_description.json is missing, unreadable, or lacks a required field.
	NoticeDescription NoticeKind = "description"
	// NoticeUnreadable: a folder or file of the tree could not be read; runs may have gone unseen.
	NoticeUnreadable NoticeKind = "unreadable"
	// NoticeOutside: a folder is a link that is not followed; runs may have gone unseen.
	NoticeOutside NoticeKind = "outside"
	// NoticeName: a file or folder looks like a BOLD image, a sidecar of one, or a subject, but its name is not valid; it is not used.
	NoticeName NoticeKind = "name"
	// NoticeMisplaced: the name is valid, but not in that folder; it is not used.
	NoticeMisplaced NoticeKind = "misplaced"
	// NoticeIgnored: a BOLD image or folder is excluded by .bidsignore.
	NoticeIgnored NoticeKind = "ignored"
	// NoticeUnused: a sidecar applies to no image.
	NoticeUnused NoticeKind = "unused"
	// NoticePattern: a line of .bidsignore is not a pattern and is not used.
	NoticePattern NoticeKind = "pattern"
)

// Notice says why something in the dataset was passed over. It is not a fault
// of a run, for there is no run it could belong to.
type Notice struct {
	Kind     NoticeKind `json:"kind"`
	Path     string     `json:"path"` // relative to the dataset, slashes; may hold any byte a file name can
	Found    string     `json:"found"`
	Expected string     `json:"expected"`
	Remedy   string     `json:"remedy"`
}

// Hides reports whether runs of the selection may have gone unseen, against
// the user's will: success must not be claimed for the whole selection then.
func (n Notice) Hides() bool { return n.Kind == NoticeUnreadable || n.Kind == NoticeOutside }

// String gives the notice as one line, whatever its path holds.
func (n Notice) String() string {
	var b strings.Builder
	b.WriteString(plain(n.Path) + ": " + n.Found)
	if n.Expected != "" {
		fmt.Fprintf(&b, ", expected %s", n.Expected)
	}
	if n.Remedy != "" {
		fmt.Fprintf(&b, "; %s", n.Remedy)
	}
	return b.String()
}

// plain returns s itself if it is fit for one line, and in quotes otherwise.
func plain(s string) string {
	for _, r := range s {
		if !unicode.IsPrint(r) || r == unicode.ReplacementChar {
			return fmt.Sprintf("%q", s)
		}
	}
	return s
}

func sortNotices(n []Notice) {
	slices.SortFunc(n, func(a, b Notice) int {
		return cmp.Or(cmp.Compare(a.Path, b.Path), cmp.Compare(a.Kind, b.Kind), cmp.Compare(a.Found, b.Found))
	})
}
