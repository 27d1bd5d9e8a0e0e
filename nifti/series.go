package nifti

import "io"

// Series is a 4-D image: Data[x+NX*(y+NY*(z+NZ*t))].
type Series struct {
	NX, NY, NZ, NT int
	Data           []float32
}

// Volume returns the samples of volume t, aliasing Data.
func (s *Series) Volume(t int) []float32 {
	n := s.NX * s.NY * s.NZ
	return s.Data[t*n : (t+1)*n : (t+1)*n]
}

// ReadSeries reads a whole image and checks it to its last byte, leaving out
// the first skip volumes (a negative number panics); their values are not looked
// at. The header is that of the file: it still counts them. An image with no
// volume left gives an [*Error]. Errors and tap are those of [Open] and
// [Reader.ReadVolume].
func ReadSeries(path string, tap io.Writer, skip int) (h *Header, s *Series, err error) {
	r, nt, err := openBehind(path, tap, skip)
	if err != nil {
		return nil, nil, err
	}
	defer func() {
		if e := r.Close(); e != nil && err == nil {
			h, s, err = nil, nil, e
		}
	}()
	h = r.Header()
	nx, ny, nz, _ := h.Size()
	s = &Series{NX: nx, NY: ny, NZ: nz, NT: nt}
	s.Data = make([]float32, nx*ny*nz*s.NT)
	for t := range s.NT {
		if err := r.ReadVolume(s.Volume(t)); err != nil {
			return nil, nil, err
		}
	}
	if err := r.SkipVolume(); err != io.EOF {
		return nil, nil, err
	}
	return h, s, nil
}
