package dataset

import (
	"path"
	"strings"

	"github.com/bmatcuk/doublestar/v4"
)

// ignoreRules are the lines of a .bidsignore. The standard gives the file the
// syntax of .gitignore; the rules below are those of the gitignore manual page:
// the last pattern that matches decides; "!" takes back; a pattern with a slash
// at its beginning or in its middle is anchored at the dataset, any other
// matches at every depth; a slash at its end restricts it to folders; what lies
// in an ignored folder cannot be taken back.
type ignoreRules []ignoreRule

type ignoreRule struct {
	pattern string // for doublestar.Match against a path relative to the dataset
	negated bool
	onlyDir bool
}

// parseIgnore reads the text of a .bidsignore. Lines that are no pattern are
// returned beside the rules and have no effect.
func parseIgnore(text string) (rules ignoreRules, bad []string) {
	text = strings.TrimPrefix(text, "\ufeff")
	for _, line := range strings.Split(text, "\n") {
		line = strings.TrimSuffix(line, "\r")
		line = trimSpaces(line)
		if line == "" || line[0] == '#' {
			continue
		}
		var r ignoreRule
		p := line
		if p[0] == '!' {
			r.negated, p = true, p[1:]
		}
		if strings.HasSuffix(p, "/") {
			r.onlyDir, p = true, strings.TrimRight(p, "/")
		}
		anchored := strings.Contains(p, "/")
		p = strings.TrimPrefix(p, "/")
		p = escapeBraces(p)
		if !anchored {
			p = "**/" + p
		}
		if strings.HasSuffix(p, "/**") {
			// Everything inside, but not the folder itself.
			p += "/*"
		}
		if p == "**/" || p == "" || strings.Contains(p, "[[:") || !doublestar.ValidatePattern(p) {
			bad = append(bad, line)
			continue
		}
		r.pattern = p
		rules = append(rules, r)
	}
	return rules, bad
}

// trimSpaces takes trailing spaces off, unless a backslash keeps them.
func trimSpaces(s string) string {
	for strings.HasSuffix(s, " ") && !strings.HasSuffix(s, `\ `) {
		s = s[:len(s)-1]
	}
	return s
}

// escapeBraces keeps braces literal: alternatives in braces are not part of
// gitignore's language, but are of the matcher's.
func escapeBraces(p string) string {
	var b strings.Builder
	class := false
	for i := 0; i < len(p); i++ {
		c := p[i]
		switch {
		case c == '\\' && i+1 < len(p):
			b.WriteByte(c)
			i++
			c = p[i]
		case c == '[' && !class:
			class = true
		case c == ']':
			class = false
		case (c == '{' || c == '}') && !class:
			b.WriteByte('\\')
		}
		b.WriteByte(c)
	}
	return b.String()
}

// ignored reports whether a path relative to the dataset is excluded, by
// itself or with a folder it lies in.
func (rules ignoreRules) ignored(rel string, isDir bool) bool {
	if len(rules) == 0 {
		return false
	}
	if parent := path.Dir(rel); parent != "." && parent != "/" && rules.ignored(parent, true) {
		return true
	}
	verdict := false
	for _, r := range rules {
		if r.negated != verdict || r.onlyDir && !isDir {
			continue // it could change nothing
		}
		if doublestar.MatchUnvalidated(r.pattern, rel) {
			verdict = !r.negated
		}
	}
	return verdict
}
