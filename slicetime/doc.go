// Package slicetime moves every slice of an EPI series to one instant.
//
// The slices of a volume are excited one after another, so that a voxel of a
// late slice is sampled later than one of an early slice. A series
// data[x+nx*(y+ny*(z+nz*t))] whose slice k was excited at t TR + tau_k becomes,
// by [Correct], a series every value of which stands at t TR + ref: sample m of
// a voxel is replaced by x(m + s), s = (ref - tau_k)/TR, the same s for the
// whole slice. [Schedule] holds the times, groups them by excitation
// ([Schedule.Shots]) and describes them for people ([Schedule.Words]).
//
// The package knows neither files nor sidecars. Volumes must be equally spaced;
// unequal spacing is refused before it gets here.
//
// # Method
//
// [Fourier]:
//
//  1. The least-squares line of each voxel's series is taken out.
//  2. The residual is extended by 32 samples on each side, predicted by an
//     autoregression of order 8 fitted to the voxel itself: forward and backward
//     least squares (modified covariance; Nuttall 1976, Ulrych and Clayton 1976,
//     Marple 1980) with a ridge of 1e-2 of the mean diagonal (extend.go). The
//     outer 16 are led to zero by a half cosine. Series of n < 20 samples take
//     order n/3, rounded down, and a ridge of 1e-2 (20/n)^2.
//  3. The extended residual is interpolated at the shifted instants: bin k of its
//     transform is multiplied by exp(+2 pi i k s/N), the Nyquist bin by cos(pi s) so
//     that the result stays real (fourier.go).
//  4. The line is added back, evaluated at the shifted instant.
//
// [Sinc] takes 2 R taps of sinc(x) I0(6 sqrt(1-(x/R)^2))/I0(6) (Kaiser 1974; Harris
// 1978, eq. 46), changed as little as it takes for a constant and a straight line to come
// out as themselves (sinc.go), of the samples as they are. What stands beyond an end
// of the run is the line and the prediction of steps 1 and 2, made of the 40 volumes
// nearest that end (ends.go), so that a run can be corrected as a stream: [Window].
//
// Why the sign: the transform of x(m + s) is that of x times exp(+2 pi i f s). A
// shift of more than half a sample is split into whole samples, which move
// indices, and a rest; halves go towards zero.
//
// Which samples beyond the ends to invent was chosen by simulation among linear
// bridge, even reflection, odd reflection and prediction. Bridges and even
// reflections err up to six times more at the ends; odd reflection errs twice as
// much and makes end volumes 1.4 times noisier.
//
// # Accuracy bought
//
// Measured by the tests of this package. Interior: relative RMS error of off-bin
// tones on mean 1000 and ramp 20, 120 volumes, worst of five shifts. Ends:
// BOLD-like series of unit variance below 0.2 cycles a volume, half-sample
// shift, error of the true signal at the first and last volume.
//
//	f/Nyquist            .08   .30   .50   .60   .70   .80   .90   .95
//	Fourier             2e-4  1e-4  8e-5  1e-4  2e-4  5e-4  9e-3  2e-2
//	Sinc, reach 8       6e-4  7e-4  5e-4  4e-4  1e-3  3e-2  .35   .68
//	Sinc, reach 12      7e-4  1e-4  2e-4  3e-4  1e-3  1e-3  .15   .53
//	Sinc, reach 32      2e-4  6e-5  1e-4  1e-4  4e-4  3e-4  6e-4  9e-2
//
//	ends, 40 volumes     no noise   noise sd 1
//	either kernel          .07        .94 to .97
//	ends, 20 volumes       .09       1.07
//	ends, 19 volumes       .09       1.00
//	ends, 16 volumes       .10        .98
//	ends, 10 volumes       .15        .99
//	ends,  6 volumes       .23       1.08
//	Sinc, 200 volumes      .07        .94  (of 40 volumes; of all it would be .06, .89)
//
// White noise alone, worst of six shifts to half a sample: no volume's SD grows
// by more than a tenth at any length (1.08 at 4 volumes, 1.10 at 6, 1.06 at 8),
// nor, from 9 on, by more than 0.03; that of a series in time never grows (0.98
// to 1.00).
//
// Slice by slice, tones of up to 0.4 cycles a volume come back within 4e-5 of
// their amplitude and 4e-5 rad (Fourier), or 2.2e-2 and 1.1e-2 rad (Sinc, reach
// 8, whose band ends there; within 8e-4 up to 0.35).
//
// The error grows towards the ends of the run, where half of every kernel rests
// on predicted samples; a shift reaches at most one volume in practice, and a
// value wanted after the last sample is a prediction outright. What lies above
// the Nyquist frequency 1/(2 TR) (a pulse at long TR) is folded before any
// interpolation and moves with its alias.
//
// # Guarantees
//
//  1. A slice whose shift is zero (below 1e-9 of a sample, the residue of decimal
//     times, worth a twentieth of float32's rounding) keeps every bit.
//  2. A series whose samples are all equal keeps every bit, for any shift.
//  3. A line comes back as the line, evaluated at the shifted instants, to the
//     rounding of float32 (3e-7 of the largest value).
//  4. Unit gain at frequency zero for every shift: adding a constant to a series
//     adds it to the result, to rounding. No slice gets a gain of its own.
//  5. Multiplying a series by a power of two, or by -1, does the same to the
//     result exactly; by another factor, to rounding. But a sum of two series
//     does not give the sum of their results exactly: the prediction depends on
//     the data, and reaches inwards from the ends with the tail of the kernel.
//  6. Reversing a series in time and its shift in sign reverses the result, to
//     rounding.
//  7. Finite samples give finite results. What overshoots float32 is held at its
//     largest value.
//  8. A voxel's result depends on its own samples, the shift and the options, and
//     on nothing else: not on workers, neighbours, axis or machine. Floating point
//     products are rounded before they are added, so that no compiler fuses them;
//     sums run in the order of time. A sample that is not finite spoils its voxel only,
//     and with Sinc no more of it than the kernel reaches (from among the 40 volumes at
//     an end, the volumes whose kernel passes that end too).
//  9. In the interior, shifts compose: a then b equals a + b within the errors
//     above, for what lies below 0.7 of the Nyquist frequency.
//  10. A whole shift returns the samples themselves, to rounding, and predictions
//     beyond them; far from the run only the line is left.
//  11. A predicted residual never exceeds twice the largest residual of its
//     series, even where the fitted autoregression is unstable.
//
// # Cost
//
// 64x64x36 voxels of 200 volumes on one core, CPU: 0.15 s with Fourier (1 us a voxel),
// 0.1 s with Sinc, reach 8, of which 0.05 s are the ends; in plain Go, on processors without
// AVX2, 0.8 and 0.5 s. Voxels that never change cost nothing with Fourier. Memory besides
// the series: [WorkBytes], 110 kB a worker there with Fourier, 380 with Sinc; of a window [WindowBytes], mostly the
// 15 volumes at the ends.
//
// # Incomplete
//
//   - Unequally spaced volumes.
//   - A shift that changes along the run (slices mapped through a moving head).
//   - Series of up to 8 volumes gain up to a tenth of noise at their ends, and
//     their prediction follows a signal less well than that of longer ones.
package slicetime
