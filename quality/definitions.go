package quality

import (
	"fmt"
	"slices"
)

// Definition says what a figure is. It is declared once, here; the sidecars of
// the pose table and of the quality file are written from it.
type Definition struct {
	Name        string  // as in a table's column or a JSON key
	Unit        string  // "1" for a plain ratio, "" for what has no unit (words)
	Description string  // one or more whole sentences
	Source      string  // the publication, or "evenkeel" for a definition of ours
	Levels      []Level // for a figure that takes one of a few words
}

// Level is one word that a figure can take, and what it means.
type Level struct{ Value, Description string }

// The words of pose_path.
const (
	PathUsed       = "used"
	PathNotSettled = "not settled"
	PathNotUsed    = "not used"
)

// The radii. They are used by the definitions below and by
// whoever computes the figures.
const (
	// FDRadiusMM makes turns into lengths in framewise displacement (Power et al. 2012).
	FDRadiusMM = 50
	// BallRadiusMM is the ball of the RMS deviation; customary for Jenkinson 1999.
	BallRadiusMM = 80
)

const (
	power     = "Power et al. 2012, NeuroImage 59(3):2142-2154"
	jenkinson = "Jenkinson 1999, technical report TR99MJ1"
	smyser    = "Smyser et al. 2010, Cerebral Cortex 20(12):2852-2862; Power et al. 2012, NeuroImage 59(3):2142-2154"
	krueger   = "Krueger and Glover 2001, Magnetic Resonance in Medicine 46:631-637"
	own       = "evenkeel"
)

// definitions is in the order of the documentation: first the columns of the
// pose table, as they stand there, then the figures of a whole run.
var definitions = []Definition{
	{Name: "time", Unit: "s", Source: own,
		Description: "The instant the row holds for, counted from the start of the first volume of the raw file: the one that the volume's slices were moved to or, where none was moved, the one halfway between its first and its last slice (of a three-dimensional acquisition, its middle)."},
	{Name: "shift_x", Unit: "mm", Source: own,
		Description: "Shift of the head along the world's x axis (to the right): x_volume = R (x_reference - c) + c + shift, c being RotationCentre."},
	{Name: "shift_y", Unit: "mm", Source: own,
		Description: "Shift of the head along the world's y axis (to the front), as for shift_x."},
	{Name: "shift_z", Unit: "mm", Source: own,
		Description: "Shift of the head along the world's z axis (to the top), as for shift_x."},
	{Name: "turn_x", Unit: "degree", Source: own,
		Description: "Right-handed turn of the head about the world's x axis through RotationCentre: R = Rz(turn_z) Ry(turn_y) Rx(turn_x)."},
	{Name: "turn_y", Unit: "degree", Source: own,
		Description: "Right-handed turn of the head about the world's y axis through RotationCentre, as for turn_x."},
	{Name: "turn_z", Unit: "degree", Source: own,
		Description: "Right-handed turn of the head about the world's z axis through RotationCentre, as for turn_x."},
	{Name: "fd", Unit: "mm", Source: power,
		Description: fmt.Sprintf("Framewise displacement against the volume before: the sum of the absolute differences of the three shifts and of the three turns, the turns (radian) times %d mm. The turns are about RotationCentre, and about another point the shifts, and so fd, would be others. Doubtful volumes count: look at their number beside the mean and the largest value. Undefined in the first volume and where this volume or the one before is lost.", FDRadiusMM)},
	{Name: "rms_ball", Unit: "mm", Source: jenkinson,
		Description: fmt.Sprintf("Root mean square displacement against the volume before, over a solid ball of %d mm radius about RotationCentre. Undefined where fd is.", BallRadiusMM)},
	{Name: "dvars_raw", Unit: "%", Source: smyser,
		Description: "Root mean square over the head of the change since the volume before, in the raw series, in percent of the mean over head and volumes. Undefined in the first volume. A lost volume is left out of that mean, and the differences that it has a part in are left out of Mean, Median and Max."},
	{Name: "dvars_steady", Unit: "%", Source: smyser,
		Description: "As dvars_raw, in the corrected series."},
	{Name: "outside", Unit: "1", Source: own,
		Description: "Share of the head (of the reference) that lay outside the field of view in this volume, from 0 to 1."},
	{Name: "fit", Unit: "1", Source: own,
		Description: "Correlation of the volume with the reference inside the head, both lightly smoothed, slices weighted by how well they fit, at the one pose that the volume as a whole was given (not along a pose path)."},
	{Name: "state", Source: own,
		Description: "What became of the volume.",
		Levels: []Level{
			{"aligned", "The pose was found and the volume agrees with the reference."},
			{"doubtful", "A pose was found, but the agreement with the reference or the part of the head in view is poor."},
			{"lost", "No pose could be found: the shifts and turns are n/a, the volume enters no average, and its matrix is interpolated between its aligned neighbours."},
		}},

	{Name: "expected_error", Unit: "mm", Source: own,
		Description: "Expected error of the poses of a volume's excitations, from the posterior of the pose path, for noise that is independent from pixel to pixel: root mean square displacement over the head. Undefined for a lost volume. Mean, Median and Max are over aligned volumes: for a doubtful one the posterior's noise is not what is wrong with it."},
	{Name: "residual_volume", Unit: "1", Source: own,
		Description: "Scale of the residuals of slices against the predicted slices with one pose a volume, in pixels that took no part in the path's first pass, after which the two are compared: root mean square over excitations (each is one slice, or the slices taken together), each counting at most 3, in units of the noise."},
	{Name: "residual_path", Unit: "1", Source: own,
		Description: "As residual_volume, along the pose path."},
	{Name: "explained", Unit: "1", Source: own,
		Description: "Share of the variance of the slices' pixels inside the head that the predicted slices explain."},
	{Name: "pose_path", Source: own,
		Description: "Whether the poses are those of every excitation, where these were asked for. Reason says why not; LastStep is the last change (mm) of the pose of an excitation, at most.",
		Levels: []Level{
			{PathUsed, "A pose was found for every excitation."},
			{PathNotSettled, "A pose was found for every excitation and stands, but poses were still moving when the search ended: some are off by about LastStep, and expected_error is too small."},
			{PathNotUsed, "One pose a volume stands, at the middle of the volume; Reason says why."},
		}},
	{Name: "tsnr_raw", Unit: "1", Source: krueger,
		Description: "Temporal signal to noise of the raw series: per voxel, the mean in time over the standard deviation in time (n-1, no detrending), lost volumes left out; 0 where the standard deviation is zero. Summarised over the head."},
	{Name: "tsnr_steady", Unit: "1", Source: krueger,
		Description: "As tsnr_raw, of the corrected series."},
	{Name: "spikes", Unit: "1", Source: own,
		Description: fmt.Sprintf("Spike score of each volume and slice of the raw series. d is the mean over the head's voxels of the slice of the distance from the median of the four volumes nearest in time; the score is (d - median of d) / (1.4826 median absolute deviation of d), both over the volumes of the slice. In stationary noise it is near to standard normal in long runs; in short ones large scores are commoner. Undefined for slices with fewer than %d voxels of the head and for series of fewer than %d volumes.", MinSpikeVoxels, MinSpikeVolumes)},
	{Name: "mean_fd_aligned", Unit: "mm", Source: power,
		Description: "Mean of fd over the volumes that are aligned and follow an aligned one: what a doubtful pose says of itself is left out."},
	{Name: "dvars_raised", Unit: "1", Source: own,
		Description: "Number of aligned volumes after an aligned one whose dvars_steady is more than 1.5 times their dvars_raw, and which they are (from 0). Interpolation by itself lowers DVARS. Where the correction raised it, the pose of the volume or of the one before is probably wrong there or, where slices were moved in time, a jerk nearby has probably been spread; look at those volumes before they enter an analysis."},
	{Name: "max_shift", Unit: "mm", Source: own,
		Description: "Length of the longest shift (shift_x, shift_y, shift_z) of any aligned volume. Doubtful and lost volumes, which may have moved furthest, are not covered: look at their numbers too."},
	{Name: "volumes", Unit: "1", Source: own,
		Description: "Number of volumes in the output."},
	{Name: "volumes_aligned", Unit: "1", Source: own,
		Description: "Number of volumes whose state is aligned."},
	{Name: "volumes_doubtful", Unit: "1", Source: own,
		Description: "Number of volumes whose state is doubtful."},
	{Name: "volumes_lost", Unit: "1", Source: own,
		Description: "Number of volumes whose state is lost."},
}

// poseColumns is how many of the definitions, from the first, are columns of
// the pose table.
const poseColumns = 14

// Definitions returns every definition, in the order of the documentation.
func Definitions() []Definition { return slices.Clone(definitions) }

// PoseColumns returns the definitions of the pose table's columns, in the order
// of the table.
func PoseColumns() []Definition { return slices.Clone(definitions[:poseColumns]) }

// Lookup returns the definition of a name.
func Lookup(name string) (Definition, bool) {
	for _, d := range definitions {
		if d.Name == name {
			return d, true
		}
	}
	return Definition{}, false
}

// Define returns the definition of a name. A name that is not declared is a
// mistake of ours and panics.
func Define(name string) Definition {
	d, ok := Lookup(name)
	if !ok {
		panic("quality: undeclared figure " + name)
	}
	return d
}
