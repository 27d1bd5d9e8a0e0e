package nifti

import (
	"errors"
	"io"
	"runtime/debug"
	"sync"

	"evenkeel/internal/parallel"
)

// A Stream gives the volumes of an image in the order of the file, as they are
// stored. They are decoded by a goroutine of its own while the caller works on
// earlier ones, at most so many volumes ahead, into volumes that were given
// back: memory is that of the volumes the caller holds and of those ahead, and
// once they are there nothing is allocated for another volume.
type Stream struct {
	h      *Header
	nt     int
	part   bool               // volumes that are there are left
	vols   chan *StoredVolume // closed at the end
	quit   chan struct{}
	ended  chan struct{} // the goroutine has gone
	closed sync.Once

	mu   sync.Mutex
	free []*StoredVolume

	err error           // io.EOF or what ended the reading; of the goroutine until vols is closed
	bug *parallel.Panic // likewise
	r   *Reader
}

// OpenStream opens an image and begins to decode it, leaving out the first skip
// volumes, ahead volumes at most (at least one) before they are asked for.
// Errors are those of [ReadSeries]. tap is used as by [Open], from a goroutine
// of the stream's own: it is left alone from when Next has returned an error
// (io.EOF among them), or Close has returned. The caller must Close the stream.
func OpenStream(path string, tap io.Writer, skip, ahead int) (*Stream, error) {
	return openStreamOf(path, tap, skip, -1, ahead)
}

// OpenPart is [OpenStream] for the first count volumes after those left out. The rest of
// the file is neither read nor checked, unless there is no other volume.
func OpenPart(path string, tap io.Writer, skip, count, ahead int) (*Stream, error) {
	if count < 0 {
		panic("nifti: a negative number of volumes")
	}
	return openStreamOf(path, tap, skip, count, ahead)
}

// openStreamOf opens the first count volumes, all if count is below zero.
func openStreamOf(path string, tap io.Writer, skip, count, ahead int) (*Stream, error) {
	r, nt, err := openBehind(path, tap, skip)
	if err != nil {
		return nil, err
	}
	part := count >= 0 && count < nt
	if part {
		nt = count
	}
	s := &Stream{h: r.h, nt: nt, part: part, r: r, quit: make(chan struct{}), ended: make(chan struct{}),
		// One is in the hands of the goroutine while the channel is full.
		vols: make(chan *StoredVolume, max(ahead, 1)-1)}
	go s.run()
	return s, nil
}

// Header returns the header, which must not be changed. It counts the volumes left
// out.
func (s *Stream) Header() *Header { return s.h }

// Volumes returns how many volumes the stream gives in all.
func (s *Stream) Volumes() int { return s.nt }

// Next returns the next volume, which is the caller's until [StoredVolume.Release].
// After the last one, and once the file was checked to its end, it returns
// io.EOF, as [Reader.ReadVolume] does; errors are those of ReadVolume. Several
// goroutines may call it; each volume goes to one of them.
func (s *Stream) Next() (*StoredVolume, error) {
	v, ok := <-s.vols
	if ok {
		return v, nil
	}
	if s.bug != nil {
		panic(s.bug)
	}
	return nil, s.err
}

// Release gives a volume of a [Stream] back for another one; after that it must not
// be used. Twice panics. Of a volume that belongs to no stream it does nothing.
// A volume that is never released is not lost, but the next one takes new memory.
func (v *StoredVolume) Release() {
	s := v.origin
	if s == nil {
		return
	}
	s.mu.Lock()
	defer s.mu.Unlock()
	if !v.out {
		panic("nifti: a volume released twice")
	}
	v.out = false
	s.free = append(s.free, v)
}

func (s *Stream) spare() *StoredVolume {
	s.mu.Lock()
	defer s.mu.Unlock()
	if k := len(s.free); k > 0 {
		v := s.free[k-1]
		s.free = s.free[:k-1]
		v.out = true
		return v
	}
	v := NewStored(s.h)
	v.origin, v.out = s, true
	return v
}

func (s *Stream) run() {
	defer close(s.ended)
	defer close(s.vols)
	defer func() {
		if v := recover(); v != nil {
			s.bug = &parallel.Panic{Value: v, Stack: debug.Stack()}
		}
	}()
	for t := range s.nt {
		v := s.spare()
		if s.err = s.r.ReadStored(v); s.err != nil {
			return
		}
		v.index = t
		select {
		case s.vols <- v:
		case <-s.quit:
			s.err = errStreamClosed
			return
		}
	}
	if s.part {
		s.err = io.EOF
		return
	}
	s.err = s.r.SkipVolume() // the rest of the file
}

var errStreamClosed = errors.New("nifti: the stream was closed")

// Close ends the reading, wherever it stands, and closes the file. Volumes that were
// handed out stay usable. A second call does nothing.
func (s *Stream) Close() (err error) {
	s.closed.Do(func() {
		close(s.quit)
		<-s.ended
		err = s.r.Close()
	})
	return err
}
