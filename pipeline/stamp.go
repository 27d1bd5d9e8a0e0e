package pipeline

import (
	"io/fs"
	"os"

	"evenkeel/fault"
)

// A stamp is what the file system says about a file; when it differs before and
// after reading, the file changed meanwhile.
type stamp struct {
	size  int64
	mtime int64 // ns
	info  fs.FileInfo
}

func stampFrom(info fs.FileInfo) stamp {
	return stamp{size: info.Size(), mtime: info.ModTime().UnixNano(), info: info}
}

// stampOf follows links: what matters is the content that is read.
func stampOf(name string) (stamp, error) {
	info, err := os.Stat(name)
	if err != nil {
		return stamp{}, err
	}
	return stampFrom(info), nil
}

func (s stamp) same(t stamp) bool {
	return s.size == t.size && s.mtime == t.mtime && (s.info == nil) == (t.info == nil) &&
		(s.info == nil || os.SameFile(s.info, t.info))
}

// changed returns the fault input-changed if one of the plan's inputs is no longer the
// file that the plan was made from.
func (p *Plan) changed() []fault.Fault {
	var out []fault.Fault
	for _, in := range p.Inputs {
		now, err := stampOf(p.Dataset.Path(in.Path))
		if err == nil && in.stamp.same(now) {
			continue
		}
		found := "other content than when the run was planned"
		if err != nil {
			found = "no file that can be read any more"
		}
		out = append(out, fault.New("input-changed", in.Path, "", found, "a file that stays as it is",
			"run the same command again when the dataset is at rest"))
	}
	return out
}
