package slicetime

import (
	"context"
	"fmt"
	"math"

	"evenkeel/internal/kernel"
	"evenkeel/internal/parallel"
)

// blockWidth neighbouring voxels are gathered at once: four cache lines a
// volume, and at 200 volumes 51 kB, which the second-level cache holds.
const blockWidth = 64

// Correct moves every slice of the series to one instant, in place.
//
// data is [x+nx*(y+ny*(z+nz*t))]; s.Times has one entry a slice along s.Axis;
// ref is the instant wanted, in seconds from each volume's start, so that
// sample t of a slice with time tau becomes the value at t TR + ref and the
// shift is (ref - tau)/TR samples. Slices whose shift is zero (below 1e-9 of a
// sample) and voxels that never change are left untouched, bit for bit.
//
// The bytes do not depend on workers, nor on what other voxels hold. A voxel
// with a sample that is not finite comes out not finite, with Sinc where the kernel
// reaches that sample; it touches no other.
//
// It returns an [*ArgumentError] for fewer than MinVolumes volumes, a schedule
// that does not fit the array, a repetition time not above zero, a shift of nt
// samples or more (nothing measured would be left) and options out of range;
// data is then unchanged. When ctx ends first it returns ctx.Err() and data is
// partly moved. It panics if the length of data is not nx*ny*nz*nt.
func Correct(ctx context.Context, data []float32, nx, ny, nz, nt int, s Schedule, ref float64, opt Options, workers int) error {
	if min(nx, ny, nz, nt) < 1 || len(data) != nx*ny*nz*nt {
		panic("slicetime: data is not nx*ny*nz*nt long")
	}
	size := [3]int{nx, ny, nz}
	if err := check(size, nt, s, ref, opt); err != nil {
		return err
	}
	shifts := s.shifts(ref)
	if opt.Kernel == Sinc {
		p := newSinc(size, nt, s.Axis, shifts, opt)
		desks := make([]*sincDesk, max(1, workers))
		return parallel.For(ctx, len(desks), p.pieces.count, func(worker, i int) error {
			if desks[worker] == nil {
				desks[worker] = p.newDesk(true)
			}
			p.inPlace(desks[worker], data, i)
			return nil
		})
	}
	c := &correction{data: data, volume: nx * ny * nz, nt: nt, blocks: blocksOf(size, s.Axis, blockWidth), plan: newPlan(nt)}
	known := map[float64]*move{} // looked up only, never ranged over
	for _, shift := range shifts {
		if known[shift] == nil {
			known[shift] = c.plan.newMove(shift)
		}
		c.moves = append(c.moves, known[shift])
	}
	desks := make([]*desk, max(1, workers))
	return parallel.For(ctx, len(desks), c.blocks.count, func(worker, i int) error {
		if desks[worker] == nil {
			desks[worker] = c.newDesk()
		}
		c.block(desks[worker], i)
		return nil
	})
}

// shifts returns, by slice, how many samples later than its own the instant ref is.
func (s Schedule) shifts(ref float64) []float64 {
	shifts := make([]float64, len(s.Times))
	for i, tau := range s.Times {
		shifts[i] = (ref - tau) / s.TR
	}
	return shifts
}

func check(size [3]int, nt int, s Schedule, ref float64, opt Options) error {
	if s.Axis < 0 || s.Axis > 2 {
		return &ArgumentError{"slice axis", fmt.Sprint(s.Axis), "0, 1 or 2"}
	}
	if len(s.Times) != size[s.Axis] {
		return &ArgumentError{"number of slice times", fmt.Sprint(len(s.Times)), fmt.Sprintf("%d, one a slice along axis %d", size[s.Axis], s.Axis)}
	}
	if nt < MinVolumes {
		return &ArgumentError{"number of volumes", fmt.Sprint(nt), fmt.Sprintf("%d or more", MinVolumes)}
	}
	if !(s.TR > 0) || math.IsInf(s.TR, 0) {
		return &ArgumentError{"repetition time", fmt.Sprintf("%g s", s.TR), "a number of seconds above zero"}
	}
	for i, shift := range s.shifts(ref) {
		if !(math.Abs(shift) < float64(nt)) {
			return &ArgumentError{"move of slice index " + fmt.Sprint(i), fmt.Sprintf("%g repetition times (from %g s to %g s)", shift, s.Times[i], ref), fmt.Sprintf("less than the run's %d", nt)}
		}
	}
	return opt.Check()
}

// WorkBytes bounds from above the memory that Correct allocates besides data,
// for the plan of a run before anything is read.
func WorkBytes(nx, ny, nz, nt, axis, workers int, opt Options) int64 {
	size := [3]int{nx, ny, nz}
	if nt < MinVolumes || axis < 0 || axis > 2 {
		return 0
	}
	if opt.Kernel == Sinc {
		return sincBytes(size, nt, axis, workers, opt)
	}
	m := int64(fftLength((nt + 2*extension + 1) / 2))
	b := blocksOf(size, axis, blockWidth)
	each := 4*int64(b.width)*int64(nt) + 8*laneCount*2*m + 4*laneCount*int64(nt) + 32<<10
	return 4*8*m*int64(size[axis]+2) + each*int64(max(1, workers)) + 64<<10
}

// blocks cuts a volume into pieces that are contiguous in memory. With the
// volume seen as [outer][slice][inner], inner fastest, there are two ways:
// rows of one slice while inner is long enough to be worth a trip to memory
// (slices along y or z), or, where neighbours in memory belong to different
// slices (along x), whole stretches of outer over all slices.
type blocks struct {
	outer, slices, inner int
	width                int // widest block, in voxels
	count                int
	across               bool // a block holds every slice
	group, chunks        int  // outers in a block; blocks of one row
}

// blocksOf cuts into blocks of at most long voxels, across slices perhaps more.
func blocksOf(size [3]int, axis, long int) blocks {
	b := blocks{outer: 1, slices: size[axis], inner: 1}
	for a, n := range size {
		if a < axis {
			b.inner *= n
		} else if a > axis {
			b.outer *= n
		}
	}
	if b.inner < 2*laneCount && b.outer > 1 {
		b.across = true
		// Enough to fill a batch of every slice.
		b.group = min(b.outer, max((laneCount+b.inner-1)/b.inner, long/(b.slices*b.inner)))
		b.width = b.group * b.slices * b.inner
		b.count = (b.outer + b.group - 1) / b.group
		return b
	}
	b.width = min(b.inner, long)
	b.chunks = (b.inner + long - 1) / long
	b.count = b.outer * b.slices * b.chunks
	return b
}

// at returns where block i begins, how many voxels it has, and their slice, -1 for
// a block across slices.
func (b *blocks) at(i int) (start, width, slice int) {
	if b.across {
		from := i * b.group
		return from * b.slices * b.inner, min(b.group, b.outer-from) * b.slices * b.inner, -1
	}
	row, chunk := i/b.chunks, i%b.chunks
	return row*b.inner + chunk*b.width, min(b.width, b.inner-chunk*b.width), row % b.slices
}

type correction struct {
	*plan
	data       []float32
	volume, nt int
	blocks     blocks
	moves      []*move // by slice; equal shifts share one
}

// desk is one worker's memory.
type desk struct {
	samples []float32 // [volume][voxel of the block]
	varies  []bool
	batch   [laneCount]int // voxels of the block that wait for a full batch
	waiting int
	out     []float32 // [sample][lane] of a batch that does not lie together
	work    *scratch
}

func (c *correction) newDesk() *desk {
	return &desk{samples: make([]float32, c.blocks.width*c.nt), varies: make([]bool, c.blocks.width), out: make([]float32, laneCount*c.nt), work: c.plan.newScratch()}
}

// block moves block i.
func (c *correction) block(d *desk, i int) {
	b := &c.blocks
	start, width, slice := b.at(i)
	if slice >= 0 && c.moves[slice].shift == 0 || !c.gather(d, start, width) {
		return
	}
	if slice >= 0 {
		for v := range width {
			c.add(d, c.moves[slice], v, width)
		}
		c.flush(d, c.moves[slice], width)
	} else {
		for k, m := range c.moves {
			if m.shift == 0 {
				continue
			}
			for o := range width / (b.slices * b.inner) {
				for j := range b.inner {
					c.add(d, m, (o*b.slices+k)*b.inner+j, width)
				}
			}
			c.flush(d, m, width)
		}
	}
	c.scatter(d, start, width)
}

// gather copies the block of every volume, marks the voxels that change, and
// says whether any does.
func (c *correction) gather(d *desk, start, width int) (any bool) {
	varies := d.varies[:width]
	clear(varies)
	first := d.samples[:width]
	for t := range c.nt {
		row := d.samples[t*width:][:width]
		copy(row, c.data[t*c.volume+start:])
		for v, x := range row {
			if x != first[v] {
				varies[v] = true
				any = true
			}
		}
	}
	return any
}

func (c *correction) scatter(d *desk, start, width int) {
	for t := range c.nt {
		copy(c.data[t*c.volume+start:], d.samples[t*width:][:width])
	}
}

// add puts a voxel of the block into the batch and moves the batch when it is full.
func (c *correction) add(d *desk, m *move, voxel, width int) {
	if !d.varies[voxel] {
		return
	}
	d.batch[d.waiting] = voxel
	d.waiting++
	if d.waiting == laneCount {
		c.flush(d, m, width)
	}
}

// flush moves the voxels that wait. Lanes never mix, so that a batch that is
// not full gives the same bits.
func (c *correction) flush(d *desk, m *move, width int) {
	if d.waiting == 0 {
		return
	}
	x := c.plan.samples(d.work)
	v := &d.batch
	if first := v[0]; d.waiting == laneCount && v[laneCount-1] == first+laneCount-1 {
		kernel.WidenLanes(x, d.samples[first:], width)
		m.run(d.work, d.samples[first:], width)
		d.waiting = 0
		return
	}
	for l := d.waiting; l < laneCount; l++ {
		v[l] = v[0]
	}
	for t := range x {
		row := d.samples[t*width:][:width]
		x[t] = lanes{
			float64(row[v[0]]), float64(row[v[1]]), float64(row[v[2]]), float64(row[v[3]]),
			float64(row[v[4]]), float64(row[v[5]]), float64(row[v[6]]), float64(row[v[7]]),
		}
	}
	m.run(d.work, d.out, laneCount)
	for t := range x {
		row, from := d.samples[t*width:][:width], d.out[t*laneCount:][:laneCount]
		for l, voxel := range v[:d.waiting] {
			row[voxel] = from[l]
		}
	}
	d.waiting = 0
}
