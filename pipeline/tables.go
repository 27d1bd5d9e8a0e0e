package pipeline

import (
	"bytes"
	"math"

	"evenkeel/quality"
	"evenkeel/realign"
)

const rotationOrder = "R = Rz(turn_z) Ry(turn_y) Rx(turn_x), right-handed about the world axes through RotationCentre c: x_volume = R (x_reference - c) + c + shift"

// poseTable writes one row a volume. Columns and their order are those of
// quality.PoseColumns; a column that has no cell here is a mistake of ours.
func poseTable(p *Plan, m *measures) []byte {
	// Six parameters are n/a where a volume was lost or motion not estimated.
	pose := func(n int, v float64, digits int) string {
		if m.states[n] == "" || m.states[n] == string(realign.Lost) {
			return "n/a"
		}
		return fixed(v, digits)
	}
	cell := map[string]func(n int) string{
		"time":         func(n int) string { return fixed(p.Timing.Rows[n], digitsTime) },
		"shift_x":      func(n int) string { return pose(n, m.shifts[n][0], digitsMM) },
		"shift_y":      func(n int) string { return pose(n, m.shifts[n][1], digitsMM) },
		"shift_z":      func(n int) string { return pose(n, m.shifts[n][2], digitsMM) },
		"turn_x":       func(n int) string { return pose(n, degrees(m.turns[n][0]), digitsTurn) },
		"turn_y":       func(n int) string { return pose(n, degrees(m.turns[n][1]), digitsTurn) },
		"turn_z":       func(n int) string { return pose(n, degrees(m.turns[n][2]), digitsTurn) },
		"fd":           func(n int) string { return fixed(m.fd[n], digitsMM) },
		"rms_ball":     func(n int) string { return fixed(m.rms[n], digitsMM) },
		"dvars_raw":    func(n int) string { return fixed(m.dvarsRaw[n], digitsShare) },
		"dvars_steady": func(n int) string { return fixed(m.dvarsSteady[n], digitsShare) },
		"outside":      func(n int) string { return fixed(m.outside[n], digitsShare) },
		"fit":          func(n int) string { return fixed(m.fit[n], digitsShare) },
		"state": func(n int) string {
			if m.states[n] == "" {
				return "n/a"
			}
			return m.states[n]
		},
	}
	var b bytes.Buffer
	cols := quality.PoseColumns()
	for i, c := range cols {
		if i > 0 {
			b.WriteByte('\t')
		}
		b.WriteString(c.Name)
	}
	b.WriteByte('\n')
	for n := range m.states {
		for i, c := range cols {
			if i > 0 {
				b.WriteByte('\t')
			}
			b.WriteString(cell[c.Name](n))
		}
		b.WriteByte('\n')
	}
	return b.Bytes()
}

func degrees(rad float64) float64 { return rad * (180 / math.Pi) }

// poseDescription is the table's data dictionary, with the exact poses.
func poseDescription(p *Plan, po *posed, centre [3]float64) []byte {
	var o object
	for _, c := range quality.PoseColumns() {
		d := object{{"Description", c.Description}}
		if c.Unit != "" {
			d.add("Units", c.Unit)
		} else {
			d.add("Units", "n/a")
		}
		d.add("Source", c.Source)
		if len(c.Levels) > 0 {
			d.add("Levels", levelsObject(c.Levels))
		}
		o.add(c.Name, d)
	}
	o.add("RotationCentre", nums(centre[:]))
	o.add("RotationOrder", rotationOrder)
	mats := make([][4][]num, p.Volumes)
	poses := p.rowPoses(po)
	for n := range mats {
		m := realign.Identity.Matrix()
		if po.est != nil {
			m = poses[n].Matrix()
		}
		for r := range 4 {
			mats[n][r] = nums(m[4*r : 4*r+4])
		}
	}
	o.add("Matrices", mats)
	o.add("MatricesDescription", "For each volume the 4x4 matrix, by rows, that takes a point of the reference (world mm, x to the right, y to the front, z to the top) to where that point was in that volume. "+matricesNote(po))
	return o.file()
}

func levelsObject(levels []quality.Level) (o object) {
	for _, l := range levels {
		o.add(l.Value, l.Description)
	}
	return o
}

func matricesNote(po *posed) string {
	switch {
	case po.est == nil:
		return "Motion was not estimated: all are the identity."
	case po.path.Used:
		return "It is the pose at the row's time. That of a lost volume follows from the path around it."
	}
	return "The matrix of a lost volume is interpolated between its aligned neighbours."
}

func nums(v []float64) []num {
	out := make([]num, len(v))
	for i, x := range v {
		out[i] = num(x)
	}
	return out
}
