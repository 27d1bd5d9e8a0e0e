package realign

import (
	"context"

	"evenkeel/internal/kernel"
	"evenkeel/internal/parallel"
	"evenkeel/slicetime"
)

// Joint brings the series (as for [EstimateVolumes], changed in place) to one
// instant and one head position without interpolating anatomy in time:
//
//  1. E(x) = I(x) - g T(M^-1 x): from every slice, at its own pose, what the
//     template predicts of it is taken out, at the brightness of its instant.
//  2. E is moved from each slice's time to the instant t: a scanner voxel's E is
//     free of the anatomy that motion drags through it, so it may be interpolated.
//  3. out(X) = g T(X) + E(M(n TR + t) X): E is mapped to the reference by the
//     pose at that instant, one spatial interpolation, and the template,
//     which needs none, is put back.
//
// Sudden motion and motion faster than the volumes then hardly ring through
// neighbouring volumes, where the poses are right. (Our own combination; the parts are as cited in this
// package and in slicetime. Compare the joint space-time interpolation of
// Roche 2011, IEEE TMI 30(8):1546-1554.)
//
// s says when slices are excited. With move false nothing is moved in time and t
// only chooses the pose. lost marks volumes without a pose of their own: they take
// no part in the interpolation of their neighbours and are not moved in time
// themselves. degree is that of the spline (3 or 5). The errors are those of ctx
// and of [slicetime.Correct]; the series is then spoilt.
func (p *PathEstimate) Joint(ctx context.Context, g Grid, data []float32, nt int, s slicetime.Schedule, move bool, t float64, opt slicetime.Options, lost []bool, degree, workers int) error {
	nv := g.voxels()
	if len(data) != nv*nt || len(lost) != nt {
		panic("realign: series, grid and marks differ in size")
	}
	workers = max(1, workers)
	// Brightness goes through time by the kernel that the slices go through.
	taken := constant(p.Gains, g.N[s.Axis])
	given := taken
	if move {
		taken = gainsAt(p.Gains, lost, s, s.Times, opt)
		given = gainsAt(p.Gains, lost, s, []float64{t}, opt)
	}
	template := newSpline(g.N, 5)
	template.load(p.Reference)
	inv := mustInvert(g.Affine)
	done := &progress{tell: p.Progress}
	done.phase(0, takenOut, nt)
	batches := make([]batch, workers)
	err := parallel.For(ctx, workers, nt, func(worker, n int) error {
		defer done.piece()
		vol := data[n*nv:][:nv]
		back := make([][16]float64, g.N[s.Axis])
		for k := range back {
			back[k] = mul(inv, mul(p.Slot(n, k).Inverse().Matrix(), g.Affine))
		}
		gain := make([]gainRows, len(back))
		for k := range gain {
			gain[k] = newGainRows(g, p.Centre, &taken[n][k])
		}
		b := &batches[worker]
		area := g.N[0] * g.N[1]
		for z := range g.N[2] {
			if s.Axis == 0 {
				// Neighbours in a row stand at poses of their own.
				b.reset()
				for y := range g.N[1] {
					for x := range g.N[0] {
						at := applyAffine(&back[x], float64(x), float64(y), float64(z))
						template.add(b, at[0], at[1], at[2])
					}
				}
				template.values(b)
			} else {
				b.v = sized(b.v, area)
				for y := range g.N[1] {
					template.row(b.v[g.N[0]*y:][:g.N[0]], &back[[3]int{0, y, z}[s.Axis]], y, z)
				}
			}
			for y := range g.N[1] {
				row, predicted := vol[area*z+g.N[0]*y:][:g.N[0]], b.v[g.N[0]*y:][:g.N[0]]
				if s.Axis == 0 {
					for x, v := range predicted {
						gn := float32(gain[x].at([3]float64{float64(x), float64(y), float64(z)}))
						row[x] -= float32(gn * v)
					}
					continue
				}
				gr := &gain[[3]int{0, y, z}[s.Axis]]
				kernel.AddRamp(row, predicted, float32(-gr.row(y, z)), float32(-gr.step))
			}
		}
		return nil
	})
	if err != nil {
		return err
	}
	if move {
		kept := bridge(data, nv, lost)
		if err := slicetime.Correct(ctx, data, g.N[0], g.N[1], g.N[2], nt, s, t, opt, workers); err != nil {
			return err
		}
		for n, v := range kept {
			if v != nil {
				copy(data[n*nv:][:nv], v)
			}
		}
	}
	// One way of resampling for the whole run.
	near := true
	for n := range nt {
		near = near && NearIdentity(PoseMap(g, p.At(n, float64(float64(n)*s.TR)+t)))
	}
	res := make([]*Resampler, workers)
	done.phase(inTime, 1, nt)
	return parallel.For(ctx, workers, nt, func(worker, n int) error {
		defer done.piece()
		if res[worker] == nil {
			res[worker] = NewResampler(g.N, degree)
		}
		r := res[worker]
		vol := data[n*nv:][:nv]
		pose := p.At(n, float64(float64(n)*s.TR)+t)
		m := mul(inv, mul(pose.Matrix(), g.Affine))
		switch {
		case pose == Identity:
		case near:
			r.Near(vol, vol, affineMap(m))
		default:
			r.Load(vol)
			r.Eval(vol, affineMap(m))
		}
		gain := newGainRows(g, p.Centre, &given[n][0])
		area := g.N[0] * g.N[1]
		for z := range g.N[2] {
			plane := vol[area*z:][:area]
			for y := range g.N[1] {
				// The gain is linear along a row, wherever that lies in the volume.
				fy, fz := float64(y), float64(z)
				bright := gain.at(applyAffine(&m, 0, fy, fz))
				step := gain.at(applyAffine(&m, 1, fy, fz)) - bright
				row, reference := plane[g.N[0]*y:][:g.N[0]], p.Reference[area*z+g.N[0]*y:][:g.N[0]]
				kernel.AddRamp(row, reference, float32(bright), float32(step))
			}
		}
		return nil
	})
}

// bridge puts in place of the volumes marked the straight line between their
// nearest unmarked neighbours, and returns what was there, by volume (nil: not
// marked). Where nothing is unmarked nothing changes.
func bridge(data []float32, nv int, marked []bool) [][]float32 {
	kept := make([][]float32, len(marked))
	for n := range marked {
		if !marked[n] {
			continue
		}
		lo, hi := n-1, n+1
		for lo >= 0 && marked[lo] {
			lo--
		}
		for hi < len(marked) && marked[hi] {
			hi++
		}
		switch {
		case lo < 0 && hi >= len(marked):
			return make([][]float32, len(marked))
		case lo < 0:
			lo = hi
		case hi >= len(marked):
			hi = lo
		}
		u := float32(0)
		if hi > lo {
			u = float32(n-lo) / float32(hi-lo)
		}
		vol := data[n*nv:][:nv]
		kept[n] = append([]float32(nil), vol...)
		a, b := data[lo*nv:][:nv], data[hi*nv:][:nv]
		for i := range vol {
			vol[i] = a[i] + float32(u*(b[i]-a[i]))
		}
	}
	return kept
}
