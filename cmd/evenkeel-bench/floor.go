package main

import (
	"bufio"
	"context"
	"encoding/binary"
	"fmt"
	"io"
	"os"
	"runtime"
	"sync"

	"github.com/klauspost/compress/gzip"
	"golang.org/x/sync/errgroup"

	"evenkeel/nifti"
)

// floor decodes in, widens every volume to float32 and writes it Huffman-coded to
// out: what every program that reads and writes these files has to do at least,
// overlapped on all cores, with no digest and no sync. By default the decoder is
// that of klauspost/compress, so that the floor stays the same whatever evenkeel's
// own becomes; own takes evenkeel's.
func floor(ctx context.Context, in, out string, own bool) (err error) {
	h, err := nifti.ReadHeader(in)
	if err != nil {
		return err
	}
	if h.Datatype != nifti.Int16 || h.BigEndian {
		return fmt.Errorf("floor: %s holds %v, expected the int16 of our own runs", in, h.Datatype)
	}
	nx, ny, nz, nt := h.Size()
	f, err := os.Create(out)
	if err != nil {
		return err
	}
	defer func() {
		if e := f.Close(); err == nil {
			err = e
		}
	}()
	workers := runtime.GOMAXPROCS(0)
	w, err := nifti.NewVolumeWriter(f, h.Derived(nt, false, nifti.Float32, false, 0), true, 2*workers+1)
	if err != nil {
		return err
	}
	g, ctx := errgroup.WithContext(ctx)
	stop := context.AfterFunc(ctx, func() { w.Abort(ctx.Err()) })
	defer stop()
	var next func() (n int, widen func(dst []float32), done func(), err error)
	if own {
		s, err := nifti.OpenStream(in, nil, 0, 2*workers)
		if err != nil {
			return err
		}
		defer s.Close()
		next = func() (int, func([]float32), func(), error) {
			v, err := s.Next()
			if err != nil {
				return 0, nil, nil, err
			}
			return v.Index(), func(dst []float32) { v.Widen(dst, 0) }, v.Release, nil
		}
	} else {
		type volume struct {
			n int
			b []byte
		}
		vols, free := make(chan volume, 2*workers), make(chan []byte, 4*workers)
		for range cap(free) {
			free <- nil
		}
		g.Go(func() error {
			defer close(vols)
			f, err := os.Open(in)
			if err != nil {
				return err
			}
			defer f.Close()
			zr, err := gzip.NewReader(bufio.NewReaderSize(f, 64<<10))
			if err != nil {
				return err
			}
			if _, err := io.CopyN(io.Discard, zr, h.VoxOffset); err != nil {
				return err
			}
			for n := range nt {
				var b []byte
				select {
				case b = <-free:
				case <-ctx.Done():
					return ctx.Err()
				}
				if b == nil {
					b = make([]byte, 2*nx*ny*nz)
				}
				if _, err := io.ReadFull(zr, b); err != nil {
					return err
				}
				select {
				case vols <- volume{n, b}:
				case <-ctx.Done():
					return ctx.Err()
				}
			}
			if n, err := zr.Read(make([]byte, 1)); n > 0 || err != io.EOF {
				return fmt.Errorf("floor: something after the last voxel: %v", err)
			}
			return nil
		})
		next = func() (int, func([]float32), func(), error) {
			v, ok := <-vols
			if !ok {
				return 0, nil, nil, io.EOF
			}
			return v.n, func(dst []float32) { widen(dst, v.b) }, func() { free <- v.b }, nil
		}
	}
	var order sync.Mutex // so that volumes are begun in their order
	for range workers {
		g.Go(func() error {
			dst := make([]float32, nx*ny*nz)
			for {
				order.Lock()
				n, widen, done, err := next()
				order.Unlock()
				if err == io.EOF {
					return nil
				}
				if err != nil {
					return err
				}
				widen(dst)
				done()
				if err := w.Volume(n, dst); err != nil {
					return err
				}
			}
		})
	}
	if err := g.Wait(); err != nil {
		return err
	}
	return w.Close()
}

func widen(dst []float32, b []byte) {
	n := len(dst) &^ 3
	for i := 0; i < n; i += 4 {
		v, d := binary.LittleEndian.Uint64(b[2*i:]), dst[i:i+4:i+4]
		d[0], d[1], d[2], d[3] = float32(int16(v)), float32(int16(v>>16)), float32(int16(v>>32)), float32(int16(v>>48))
	}
	for i := n; i < len(dst); i++ {
		dst[i] = float32(int16(binary.LittleEndian.Uint16(b[2*i:])))
	}
}
