package main

import (
	"fmt"
	"io"
	"math"
	"os"
	"strconv"
	"strings"

	"github.com/urfave/cli/v2"

	"evenkeel/dataset"
	"evenkeel/pipeline"
	"evenkeel/provenance"
)

// selectors are the options that choose runs, with the BIDS key each stands for.
var selectors = []struct{ option, key string }{
	{"subject", "sub"}, {"session", "ses"}, {"task", "task"}, {"run", "run"}, {"dir", "dir"}, {"acq", "acq"}, {"echo", "echo"},
}

func selectionFlags() []cli.Flag {
	var out []cli.Flag
	for _, s := range selectors {
		usage := "only runs with this `LABEL` of " + s.key + ", without its prefix; repeatable"
		if s.option == "echo" {
			usage += "; the pose still comes from the shortest echo"
		}
		out = append(out, &cli.StringSliceFlag{Name: s.option, Usage: usage})
	}
	return append(out, &cli.StringFlag{Name: "shard", Usage: "only the K-th of N parts of the selected runs, as `K/N`", Value: "1/1"})
}

// settingFlags are derived from the declaration of the settings.
func settingFlags() []cli.Flag {
	var out []cli.Flag
	for _, c := range pipeline.Choices {
		usage := "`" + c.Values + "`: " + c.Help
		switch {
		case c.Switch:
			out = append(out, &cli.BoolFlag{Name: c.Option(), Usage: c.Help})
		case c.Repeat:
			out = append(out, &cli.StringSliceFlag{Name: c.Option(), Usage: usage + "; repeatable"})
		default:
			out = append(out, &cli.StringFlag{Name: c.Option(), Usage: usage, Value: c.Default()})
		}
	}
	return append(out, &cli.StringFlag{Name: "settings", Usage: "`FILE`: an earlier record, its settings object, or a part of one; options given beside it win"})
}

func memoryFlag() cli.Flag {
	return &cli.StringFlag{Name: "memory", Usage: "memory that runs may hold together, as `SIZE` (8GiB)", DefaultText: "3/4 of what is free"}
}

// filter reads the selection.
func filter(c *cli.Context) (dataset.Filter, string) {
	f := dataset.Filter{}
	var asked []string
	for _, s := range selectors {
		if v := c.StringSlice(s.option); len(v) > 0 {
			f[s.key] = v
			for _, l := range v {
				asked = append(asked, "--"+s.option+" "+l)
			}
		}
	}
	return f, strings.Join(asked, " ")
}

// settings reads the settings: defaults, then the file, then options.
func settings(c *cli.Context) (pipeline.Settings, error) {
	set := pipeline.DefaultSettings()
	if name := c.String("settings"); name != "" {
		data, err := readSettings(name)
		if err != nil {
			return set, &pipeline.UsageError{Where: "--settings", Message: err.Error()}
		}
		if err := set.ReadSettings(name, data); err != nil {
			return set, err
		}
	}
	for _, ch := range pipeline.Choices {
		name := ch.Option()
		if !c.IsSet(name) {
			continue
		}
		values := []string{c.String(name)}
		switch {
		case ch.Switch:
			values = []string{strconv.FormatBool(c.Bool(name))}
		case ch.Repeat:
			values = c.StringSlice(name)
		}
		if err := set.Set(ch.Key, values...); err != nil {
			return set, err
		}
	}
	return set, set.Check()
}

// readSettings reads a file of settings, or a record, which is larger. A pipe will do, but
// what never ends is not read on and on.
func readSettings(name string) ([]byte, error) {
	f, err := os.Open(name)
	if err != nil {
		return nil, err
	}
	defer f.Close()
	data, err := io.ReadAll(io.LimitReader(f, provenance.MaxBytes+1))
	if err == nil && len(data) > provenance.MaxBytes {
		err = fmt.Errorf("%s: found more than %d MiB, expected an object of settings or a record", name, provenance.MaxBytes>>20)
	}
	return data, err
}

// memory reads --memory.
func memory(c *cli.Context) (int64, error) {
	if !c.IsSet("memory") {
		return pipeline.DefaultMemory(), nil
	}
	return pipeline.ParseBytes("--memory", c.String("memory"))
}

// request reads everything that decides about plans.
func request(c *cli.Context) (pipeline.Request, error) {
	req := pipeline.Request{Workers: pipeline.Cores()}
	req.Filter, req.Asked = filter(c)
	var err error
	if req.Settings, err = settings(c); err != nil {
		return req, err
	}
	if req.Shard, err = pipeline.ParseShard(c.String("shard")); err != nil {
		return req, err
	}
	req.Memory, err = memory(c)
	return req, err
}

// limits reads the quality limits.
var limitOptions = []struct{ name, usage string }{
	{"limit-mean-fd", "a run whose mean framewise displacement is above `MM` makes the exit code 4; doubtful volumes count, lost ones do not; not with --motion none"},
	{"limit-max-fd", "a run whose largest framewise displacement is above `MM` makes the exit code 4; doubtful volumes count, lost ones do not; not with --motion none"},
	{"limit-max-shift", "a run whose longest shift of an aligned volume is above `MM` makes the exit code 4; doubtful volumes are not covered, so look at their number; not with --motion none"},
	{"limit-lost", "a run with more than `N` lost volumes makes the exit code 4; not with --motion none"},
}

func limitFlags() []cli.Flag {
	var out []cli.Flag
	for _, l := range limitOptions {
		out = append(out, &cli.StringFlag{Name: l.name, Usage: l.usage, DefaultText: "none"})
	}
	return out
}

func limits(c *cli.Context) (pipeline.Limits, error) {
	var l pipeline.Limits
	for _, o := range []struct {
		name string
		to   **float64
	}{{"limit-mean-fd", &l.MeanFD}, {"limit-max-fd", &l.MaxFD}, {"limit-max-shift", &l.MaxShift}} {
		if !c.IsSet(o.name) {
			continue
		}
		v, err := strconv.ParseFloat(c.String(o.name), 64)
		if err != nil || !(v >= 0) || math.IsInf(v, 0) {
			return l, &pipeline.UsageError{Where: "--" + o.name, Message: "found " + strconv.Quote(c.String(o.name)) + ", expected millimetres (0 or more)"}
		}
		*o.to = &v
	}
	if c.IsSet("limit-lost") {
		n, err := count(c, "limit-lost", 0)
		if err != nil {
			return l, err
		}
		l.Lost = &n
	}
	return l, nil
}

// count reads a whole number of at least lo.
func count(c *cli.Context, name string, lo int) (int, error) {
	n, err := strconv.Atoi(c.String(name))
	if err != nil || n < lo {
		return 0, &pipeline.UsageError{Where: "--" + name, Message: "found " + strconv.Quote(c.String(name)) + ", expected a whole number of " + strconv.Itoa(lo) + " or more"}
	}
	return n, nil
}
