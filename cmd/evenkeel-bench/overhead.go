package main

import (
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"os/exec"
	"path/filepath"
)

// What trust costs: SHA-256 of every byte that is read and written, and the syncing of files and
// folders, as a share of the processor time of the run that includes them.

// trustCost is processor time in s, and how much there was of each.
type trustCost struct {
	digests, syncs float64
	bytes          int64
	files          int
}

// trust does by itself what a run does for trust, in a process of its own: it digests each file of the
// dataset and of the output once, as a run does, and writes the output's files again and syncs
// each, and their folder as often as a run does. Reading and writing themselves are not counted.
func trust(root, out string, stdout io.Writer) error {
	var c trustCost
	each := func(dir string, do func(name string, b []byte) error) error {
		return filepath.WalkDir(dir, func(name string, d fs.DirEntry, err error) error {
			if err != nil || d.IsDir() {
				return err
			}
			b, err := os.ReadFile(name)
			if err != nil {
				return err
			}
			begin := processSeconds()
			sha256.Sum256(b)
			c.digests += processSeconds() - begin
			c.bytes += int64(len(b))
			return do(name, b)
		})
	}
	if err := each(root, func(string, []byte) error { return nil }); err != nil {
		return err
	}
	again, err := os.MkdirTemp(filepath.Dir(out), "again-") // on the same file system
	if err != nil {
		return err
	}
	defer os.RemoveAll(again)
	err = each(out, func(_ string, b []byte) (err error) {
		f, err := os.CreateTemp(again, "")
		if err != nil {
			return err
		}
		defer func() { err = errors.Join(err, f.Close()) }()
		if _, err = f.Write(b); err != nil {
			return err
		}
		return c.sync(f)
	})
	if err != nil {
		return err
	}
	for range 2 { // before the record is renamed and after
		f, err := os.Open(again)
		if err == nil {
			err = errors.Join(c.sync(f), f.Close())
		}
		if err != nil {
			return err
		}
	}
	_, err = fmt.Fprintln(stdout, c.digests, c.syncs, c.bytes, c.files)
	return err
}

func (c *trustCost) sync(f *os.File) error {
	begin := processSeconds()
	err := f.Sync()
	c.syncs += processSeconds() - begin
	c.files++
	return err
}

// overhead measures runs of one size and what trust costs of each, alternately.
func (b *bench) overhead(ctx context.Context, s size, stdout io.Writer) error {
	root, out := filepath.Join(b.dir, "raw-"+s.String()), b.out()
	defer os.RemoveAll(root)
	fmt.Fprintf(b.stderr, "inventing %v\n", s)
	if _, err := b.once(ctx, nil, b.self, "synthesise", root, s.String()); err != nil {
		return err
	}
	fmt.Fprintf(stdout, "\n%v, processor time of digests and syncs within that of a run\n\n", s)
	fmt.Fprint(stdout, "| what | CPU s | digests s | syncs s | share | digested | synced |\n| --- | --- | --- | --- | --- | --- | --- |\n")
	for _, p := range programs[:2] {
		var run, digests, syncs []float64
		var last trustCost
		for range b.set.times {
			c, err := b.once(ctx, nil, b.set.program, append([]string{"steady", root, out}, p.args...)...)
			if err != nil {
				return err
			}
			text, err := exec.CommandContext(ctx, b.self, "trust", root, out).Output()
			if err != nil {
				return fmt.Errorf("trust: %w", err)
			}
			if _, err := fmt.Sscan(string(text), &last.digests, &last.syncs, &last.bytes, &last.files); err != nil {
				return fmt.Errorf("trust said %q: %w", text, err)
			}
			run, digests, syncs = append(run, c.cpu), append(digests, last.digests), append(syncs, last.syncs)
			if err := os.RemoveAll(out); err != nil {
				return err
			}
		}
		cpu, d, f := middle(run), middle(digests), middle(syncs)
		fmt.Fprintf(stdout, "| %s | %.2f | %.3f | %.3f | %.1f %% | %d MiB | %d |\n", p.name, cpu, d, f, 100*(d+f)/cpu, last.bytes>>20, last.files)
	}
	return nil
}
