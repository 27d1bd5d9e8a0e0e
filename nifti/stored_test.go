package nifti

import (
	"bytes"
	"encoding/binary"
	"errors"
	"io"
	"os"
	"runtime"
	"strings"
	"sync"
	"testing"
	"time"

	"pgregory.net/rapid"
)

// streamAll reads to the end, releasing some volumes late.
func streamAll(s *Stream) ([]float32, error) {
	var all []float32
	var held []*StoredVolume
	for n := 0; ; n++ {
		v, err := s.Next()
		if err == io.EOF {
			if n != s.Volumes() {
				return nil, errors.New("another number of volumes")
			}
			return all, nil
		}
		if err != nil {
			return nil, err
		}
		if v.Index() != n {
			return nil, errors.New("a volume out of its order")
		}
		w := make([]float32, v.Len())
		v.Widen(w, 0)
		all = append(all, w...)
		if held = append(held, v); len(held) > 2 {
			held[0].Release()
			held = held[1:]
		}
	}
}

// A stored volume, widened, has the bits that ReadVolume gives: every type, both
// orders, with and without scaling, whole and from the middle; and so have streams
// and stored series, with volumes left out, and the tap sees the file.
func TestStoredProperty(t *testing.T) {
	dir := t.TempDir()
	rapid.Check(t, func(t *rapid.T) {
		dt := rapid.SampledFrom(allTypes).Draw(t, "type")
		size := rapid.SampledFrom([]int{1, 2, 3, 5, 7, 8})
		nx, ny, nz, nt := size.Draw(t, "nx"), size.Draw(t, "ny"), size.Draw(t, "nz"), rapid.IntRange(1, 6).Draw(t, "nt")
		im := sample(rapid.IntRange(1, 2).Draw(t, "version"), rapid.SampledFrom(bothOrders).Draw(t, "order"))
		im.set("dim", 4, float64(nx), float64(ny), float64(nz), float64(nt), 1, 1, 1)
		im.set("datatype", float64(dt)).set("bitpix", float64(8*dt.Bytes()))
		im.set("scl_slope", rapid.SampledFrom([]float64{0, 1, 0.5, -3, 1e-3}).Draw(t, "slope"))
		im.set("scl_inter", rapid.SampledFrom([]float64{0, 10.25}).Draw(t, "inter"))
		nv := nx * ny * nz
		im.data = make([]byte, nv*nt*dt.Bytes())
		for i := range nv * nt {
			switch dt {
			case Float32:
				putNumber(im.data[4*i:], im.order, "f32", float64(i)*1.25-300)
			case Float64:
				putNumber(im.data[8*i:], im.order, "f64", float64(i)*1.25-300)
			default:
				for k := range dt.Bytes() {
					im.data[i*dt.Bytes()+k] = byte(i*(i+37)>>k) * 31
				}
			}
		}
		b := im.bytes()
		path := dir + "/a.nii"
		if rapid.Bool().Draw(t, "gzip") {
			b, path = zip(b), path+".gz"
		}
		if err := os.WriteFile(path, b, 0o666); err != nil {
			t.Fatal(err)
		}
		skip := rapid.IntRange(0, nt-1).Draw(t, "skip")
		_, want, err := ReadSeries(path, nil, skip)
		if err != nil {
			t.Fatal(err)
		}
		var seen bytes.Buffer
		st, err := OpenStream(path, &seen, skip, rapid.IntRange(0, 4).Draw(t, "ahead"))
		if err != nil {
			t.Fatal(err)
		}
		defer st.Close()
		got, err := streamAll(st)
		if err != nil {
			t.Fatal(err)
		}
		if i := sameFloats(got, want.Data); i >= 0 {
			t.Fatalf("%v: value %d of the stream differs", dt, i)
		}
		if !bytes.Equal(seen.Bytes(), b) {
			t.Fatal("the tap of the stream did not see the file")
		}
		if _, err := st.Next(); err != io.EOF {
			t.Fatalf("after the end: %v", err)
		}
		seen.Reset()
		// Volumes that are kept stay what they are.
		again, err := OpenStream(path, nil, skip, 1)
		if err != nil {
			t.Fatal(err)
		}
		defer again.Close()
		if again.Volumes() != nt-skip || again.Header().Datatype != dt {
			t.Fatalf("%d volumes of %v", again.Volumes(), again.Header().Datatype)
		}
		var kept []*StoredVolume
		for range again.Volumes() {
			v, err := again.Next()
			if err != nil {
				t.Fatal(err)
			}
			kept = append(kept, v)
		}
		for n, v := range kept {
			from := rapid.IntRange(0, nv).Draw(t, "from")
			part := make([]float32, rapid.IntRange(0, nv-from).Draw(t, "length"))
			v.Widen(part, from)
			if i := sameFloats(part, want.Volume(n)[from:from+len(part)]); i >= 0 {
				t.Fatalf("%v: value %d of volume %d differs", dt, from+i, n)
			}
			if v.Index() != n {
				t.Fatal("index")
			}
			if (v.b16 != nil) != (dt.Bytes() == 2) || (v.Float32() != nil) != (dt.Bytes() >= 4) {
				t.Fatalf("%v held as %v, %v", dt, v.b16, v.Float32())
			}
			for i, x := range v.b16 {
				if x != int16(im.order.Uint16(im.data[2*(i+nv*(n+skip)):])) {
					t.Fatalf("stored voxel %d is %d", i, x)
				}
			}
		}
	})
}

// Every malformed file gives a Stream the error that ReadSeries gives.
func TestStoredMalformed(t *testing.T) {
	for _, c := range malformed {
		if strings.HasSuffix(c.file, ".hdr") {
			continue // the header alone
		}
		path := writeFile(t, c.file, c.make())
		_, _, want := ReadSeries(path, nil, 0)
		st, err := OpenStream(path, nil, 0, 2)
		if err == nil {
			_, err = streamAll(st)
			if _, again := st.Next(); again != err {
				t.Errorf("%s: then %v", c.name, again)
			}
			st.Close()
		}
		if err == nil || err.Error() != want.Error() {
			t.Errorf("%s: %v\nwant %v", c.name, err, want)
		}
		asError(t, err)
	}
}

// 16 bits that scaling takes beyond float32.
func TestStoredNotFinite(t *testing.T) {
	for _, dt := range []Datatype{Int16, Uint16, Uint8, Int8} {
		im := sample(2, binary.BigEndian).set("scl_slope", 1e37).set("datatype", float64(dt)).set("bitpix", float64(8*dt.Bytes()))
		im.data = make([]byte, 120*dt.Bytes())
		im.data[67*dt.Bytes()] = 0x7f
		path := writeFile(t, "a.nii", im.bytes())
		_, _, want := ReadSeries(path, nil, 0)
		st, err := OpenStream(path, nil, 0, 2)
		if err != nil {
			t.Fatal(err)
		}
		_, err = streamAll(st)
		st.Close()
		if err == nil || err.Error() != want.Error() || asError(t, err).Field != "voxel (2,1,0), volume 1" {
			t.Errorf("%v: %v, want %v", dt, err, want)
		}
	}
}

// A tap that fails ends a stream with its error; closing ends it anywhere.
func TestStreamBreaksOff(t *testing.T) {
	h := benchHeader(64, 64, 4, 50, Int16)
	path := writeFile(t, "a.nii.gz", func() []byte {
		var b bytes.Buffer
		v := make([]float32, h.voxels()*50)
		numbered(h, 3, v)
		if err := writeAll(&b, h, true, v); err != nil {
			t.Fatal(err)
		}
		return b.Bytes()
	}())
	st, err := OpenStream(path, &full{200 << 10}, 0, 3)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := streamAll(st); !errors.Is(err, errDisk) {
		t.Errorf("a tap that fails: %v", err)
	}
	st.Close()
	for taken := range 6 {
		goroutines := runtime.NumGoroutine()
		st, err := OpenStream(path, nil, 0, 3)
		if err != nil {
			t.Fatal(err)
		}
		var v *StoredVolume
		for range taken {
			if v, err = st.Next(); err != nil {
				t.Fatal(err)
			}
		}
		if err := st.Close(); err != nil {
			t.Error(err)
		}
		if err := st.Close(); err != nil {
			t.Error(err)
		}
		if v != nil {
			v.Release()
		}
		for range 100 { // those decoded before the end still come
			if _, err = st.Next(); err != nil {
				break
			}
		}
		if err == nil || err == io.EOF {
			t.Errorf("after Close: %v", err)
		}
		for range 200 { // the goroutine may still be on its last line
			if runtime.NumGoroutine() <= goroutines {
				break
			}
			time.Sleep(time.Millisecond)
		}
		if n := runtime.NumGoroutine(); n > goroutines {
			t.Errorf("%d goroutines, %d before", n, goroutines)
		}
	}
	// A part ends by itself, and what follows it in the file is not looked at.
	cut := writeFile(t, "cut.nii.gz", func() []byte {
		b, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		return b[:len(b)-8]
	}())
	for _, count := range []int{0, 1, 7, 50} {
		st, err := OpenPart(cut, nil, 0, count, 3)
		if err != nil {
			t.Fatal(err)
		}
		n := 0
		for {
			v, e := st.Next()
			if err = e; err != nil {
				break
			}
			if v.Index() != n {
				t.Errorf("volume %d, want %d", v.Index(), n)
			}
			n++
			v.Release()
		}
		if (err == io.EOF) != (count < 50) || st.Volumes() != count || n < min(count, 49) {
			t.Errorf("a part of %d: %d volumes, %v", count, n, err)
		}
		st.Close()
	}
	if _, err := OpenStream(path, nil, 50, 3); asError(t, err).Field != "dim[4]" {
		t.Error(err)
	}
	st, _ = OpenStream(path, nil, 0, 1)
	v, err := st.Next()
	if err != nil {
		t.Fatal(err)
	}
	v.Release()
	defer st.Close()
	defer func() {
		if recover() == nil {
			t.Error("released twice")
		}
	}()
	v.Release()
}

// Several consumers: each volume once, never more than they hold and those ahead in
// memory, and nothing allocated once they are there.
func TestStreamMemory(t *testing.T) {
	const nt, ahead, workers = 400, 3, 3
	h := benchHeader(16, 16, 16, nt, Int16)
	path := writeFile(t, "a.nii.gz", func() []byte {
		var b bytes.Buffer
		v := make([]float32, h.voxels()*nt)
		for i := range v {
			v[i] = float32(i / h.voxels())
		}
		if err := writeAll(&b, h, true, v); err != nil {
			t.Fatal(err)
		}
		return b.Bytes()
	}())
	st, err := OpenStream(path, nil, 0, ahead)
	if err != nil {
		t.Fatal(err)
	}
	defer st.Close()
	seen := make([]bool, nt)
	distinct := map[*StoredVolume]bool{}
	var mu sync.Mutex
	var wg sync.WaitGroup
	for range workers {
		wg.Go(func() {
			for {
				v, err := st.Next()
				if err != nil {
					if err != io.EOF {
						t.Error(err)
					}
					return
				}
				mu.Lock()
				if seen[v.Index()] || v.b16[77] != int16(v.Index()) {
					t.Errorf("volume %d twice, or with the voxels of another", v.Index())
				}
				seen[v.Index()] = true
				distinct[v] = true
				mu.Unlock()
				if v.Index()%50 == 0 {
					time.Sleep(time.Millisecond)
				}
				v.Release()
			}
		})
	}
	wg.Wait()
	for n, s := range seen {
		if !s {
			t.Errorf("volume %d never came", n)
		}
	}
	// The one that is decoded while all the others are held.
	if most := workers + ahead; len(distinct) > most {
		t.Errorf("%d volumes in memory, at most %d expected", len(distinct), most)
	}
	if raceEnabled {
		return
	}
	one, err := OpenStream(path, nil, 0, ahead)
	if err != nil {
		t.Fatal(err)
	}
	defer one.Close()
	take := func(n int) {
		for range n {
			v, err := one.Next()
			if err != nil {
				t.Fatal(err)
			}
			v.Release()
		}
	}
	take(20)
	var before, after runtime.MemStats
	runtime.ReadMemStats(&before)
	take(300)
	runtime.ReadMemStats(&after)
	if n := after.TotalAlloc - before.TotalAlloc; n > 16<<10 {
		t.Errorf("%d bytes allocated for 300 volumes", n)
	}
}
