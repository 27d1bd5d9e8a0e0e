#!/usr/bin/env python3
"""Golden values for evenkeel/slicetime, from numpy, scipy and nibabel.

    python3 slicetime/testdata/generate.py     (from the module's root, or from anywhere)

Writes beside itself:
  fourier_shift.json  circular fractional delay by numpy.fft, checked here against the periodic-sinc kernel
  windowed_sinc.json  taps of the Kaiser-windowed sinc by numpy.sinc and scipy.special.i0
  whole_method.json   whole series through line removal, extension, taper and kernel, each step the slow, plain way:
                      numpy.linalg.lstsq on the stacked forward and backward prediction equations with ridge rows
                      (no covariance recursion), complex numpy.fft of the whole length (no packing of even and odd
                      samples), taps applied one output at a time
  slice_code.json     slice times by slice_code from nibabel's Nifti1Header.get_slice_times
Only the standard seed below is random, so that two runs give the same files (last digits may follow the library versions).
"""
import json, os, sys
import numpy as np, scipy, scipy.special, nibabel as nib

HERE = os.path.dirname(os.path.abspath(__file__))

def plain(v):
    if isinstance(v, (float, np.floating)): return float('%.12g' % v) if np.isfinite(v) else None
    if isinstance(v, dict): return {k: plain(x) for k, x in v.items()}
    if isinstance(v, (list, tuple, np.ndarray)): return [plain(x) for x in v]
    if isinstance(v, np.generic): return v.item()
    return v

def write(name, about, **body):
    head = {"generated_by": "generate.py", "about": about, "versions": {"python": sys.version.split()[0], "numpy": np.__version__, "scipy": scipy.__version__, "nibabel": nib.__version__}}
    with open(os.path.join(HERE, name), "w") as f:
        head = plain({**head, **body}); long = [k for k, v in head.items() if isinstance(v, list)]
        lines = ["%s: %s" % (json.dumps(k), json.dumps(v)) for k, v in head.items() if k not in long]
        for k in long: lines.append("%s: [\n  %s\n ]" % (json.dumps(k), ",\n  ".join(json.dumps(v) for v in head[k])))
        f.write("{\n " + ",\n ".join(lines) + "\n}\n")

# ---------------------------------------------------------------- circular shift
def circular(x, shift):
    """x(n + shift), circular; an even length's Nyquist bin is multiplied by cos(pi shift)"""
    n = len(x); X = np.fft.rfft(x); h = np.exp(2j * np.pi * np.arange(len(X)) * shift / n)
    if n % 2 == 0: h[-1] = np.cos(np.pi * shift)
    return np.fft.irfft(X * h, n)

def dirichlet(x, shift):
    """the same through the periodic sinc, sin(pi u) cot(pi u/n)/n (even n)"""
    n = len(x); u = np.arange(n)[:, None] + shift - np.arange(n)[None, :]
    s = np.sin(np.pi * u / n)
    with np.errstate(all="ignore"): k = np.where(abs(s) < 1e-13, 1.0, np.sin(np.pi * u) * np.cos(np.pi * u / n) / (n * s))
    return k @ x

def fourier(rng):
    signals = {"worked": [1., 2, 0, -1, 3, .5, -2, 1.5], "nyquist": [1., -1] * 4, "cosine, 2 of 12": np.cos(2 * np.pi * 2 * np.arange(12) / 12), "constant": [3.25] * 6}
    for n in (4, 6, 8, 12, 16, 18, 24, 32, 36, 48, 64, 72, 96): signals["random %d" % n] = np.round(rng.normal(0, 1, n), 4)
    cases, worst = [], 0
    for name, x in signals.items():
        x = np.asarray(x, float)
        for s in (.25, .5, -.3, -.5, 1., 1e-3):
            y = circular(x, s); worst = max(worst, abs(y - dirichlet(x, s)).max())
            cases.append({"signal": name, "x": x, "shift": s, "y": y})
    assert worst < 1e-12, worst
    write("fourier_shift.json", "circular shift y[n] = x(n + shift); numpy.fft.rfft, irfft", largest_difference_from_periodic_sinc=worst, cases=cases)

# ---------------------------------------------------------------- windowed sinc
BETA = 6.0
def kaiser(x, reach, beta=BETA):
    u = np.asarray(x, float) / reach
    return np.where(abs(u) < 1, scipy.special.i0(beta * np.sqrt(np.clip(1 - u * u, 0, None))) / scipy.special.i0(beta), 0.0)

def taps(reach, frac):
    x = frac - np.arange(-reach, reach + 1); w = np.sinc(x) * kaiser(x, reach)
    return w / w.sum()

def line_taps(reach, frac):
    """the nearest taps, in squares divided by the window, that give sum 1 and first moment frac: least norm of lstsq"""
    j = np.arange(-reach, reach + 1); w = taps(reach, frac); root = np.sqrt(kaiser(frac - j, reach)); A = np.vstack([np.ones(len(j)), j])
    return w + root * np.linalg.lstsq(A * root, np.array([1., frac]) - A @ w, rcond=None)[0]

def sinc():
    xs = np.array([0, .25, .5, .75, 1.25, 1.5, 2.5, 2.75, 3.5, 3.999, 4, 5])
    windows = [{"reach": a, "beta": b, "x": xs, "kernel": np.sinc(xs) * kaiser(xs, a, b)} for a, b in ((3, 6.), (4, 6.), (8, 6.), (8, 8.), (32, 6.))]
    cases = [{"reach": r, "frac": f, "taps": taps(r, f), "line_taps": line_taps(r, f)} for r in (1, 2, 3, 8, 17, 32) for f in (.5, .25, -.13, -.5, 1e-6)]
    write("windowed_sinc.json", "sinc(x) w(x), w of Kaiser; taps of samples -reach..reach for a value frac later than sample 0, sum one; line_taps: first moment frac too", windows=windows, cases=cases)

# ---------------------------------------------------------------- the whole method
def autoregression(r, q=8, ridge=1e-2):
    n = len(r); rows, rhs = [], []
    for t in range(q, n): rows.append(r[t - q:t][::-1]); rhs.append(r[t])              # forward
    for t in range(0, n - q): rows.append(r[t + 1:t + q + 1]); rhs.append(r[t])        # backward
    A = np.array(rows); lam = ridge * (A ** 2).sum() / q
    A = np.vstack([A, np.sqrt(lam) * np.eye(q)]); b = np.concatenate([rhs, np.zeros(q)])
    return np.linalg.lstsq(A, b, rcond=None)[0]

def extended(r):
    n = len(r); e = 32; top = 2 * abs(r).max()
    a = autoregression(r) if n >= 20 else autoregression(r, max(1, n // 3), 1e-2 * (20 / n) ** 2); q = len(a)
    def run(x):
        x = list(x)
        for _ in range(e): x.append(float(np.clip(np.dot(a, x[:-q - 1:-1]), -top, top)))
        return np.array(x[-e:])
    right = run(r); left = run(r[::-1])
    h = e // 2; w = np.ones(e); w[e - h:] = .5 + .5 * np.cos(np.pi * np.arange(1, h + 1) / (h + 1))
    return e, np.concatenate([(left * w)[::-1], r, right * w])

def length(n):
    """smallest 2 * 2^a 3^b, b <= 2, that holds n samples"""
    return min(L for L in (2 * 2 ** a * 3 ** b for a in range(20) for b in range(3)) if L >= n)

def moved(x, shift, kernel, reach=8):
    x = np.asarray(x, float); n = len(x); t = np.arange(n)
    slope, level = np.polyfit(t, x, 1); line = lambda u: level + slope * u
    e, z = extended(x - line(t)); k = int(np.sign(shift) * np.ceil(abs(shift) - .5)); f = shift - k
    if kernel == "fourier":
        L = length(n + 2 * e); y = circular(np.concatenate([z, np.zeros(L - len(z))]), f)[:len(z)] if f else z
    pad = 200; out = np.zeros(n)
    if kernel == "fourier": y = np.concatenate([np.zeros(pad), y, np.zeros(pad)])
    else: return windowed(x, k, f, reach)
    for m in range(n):
        at = pad + e + m + k
        v = y[at] if 40 <= at < pad * 2 + n + 2 * e - 40 else 0.
        out[m] = line(m + shift) + v
    return out

def past(x):
    """what stands after the last sample: line and prediction from the last 40, then the line"""
    x = x[-40:]; n = len(x); t = np.arange(n); slope, level = np.polyfit(t, x, 1); e, z = extended(x - (level + slope * t))
    p = np.zeros(400); p[:e] = z[e + n:]; return level + slope * (n + np.arange(400)) + p

def windowed(x, k, f, reach):
    n = len(x); pad = 400; z = np.concatenate([past(x[::-1])[::-1], x, past(x)]); w = line_taps(reach, f) if f else None
    return np.array([z[pad + m + k] if w is None else np.dot(w, z[pad + m + k - reach:pad + m + k + reach + 1]) for m in range(n)])

def whole(rng):
    cases = []
    for n in (4, 5, 6, 7, 10, 16, 19, 20, 21, 40, 76, 99):
        t = np.arange(n)
        slow = np.cumsum(rng.normal(0, 1, n)); signals = {
            "walk": 1000 + 4 * slow, "noise": 500 + 10 * rng.normal(0, 1, n),
            "tone": 1000 + 20 * t / n + 10 * np.sin(2 * np.pi * .31 * t + 1), "step": np.where(t < n // 2, 100., 140.), "growing": 1.35 ** np.minimum(t, 40)}
        for name, x in signals.items():
            x = np.float32(x)
            moves = []
            for s in ((.5, -.37) if n > 40 else (-.5, .9, -2.3, 1., 50.25)):
                moves.append({"kernel": "fourier", "reach": 0, "shift": s, "y": moved(x, s, "fourier")})
                for reach in (1, 8, 32) if n in (7, 40) else (8,):
                    moves.append({"kernel": "sinc", "reach": reach, "shift": s, "y": moved(x, s, "sinc", reach)})
            cases.append({"signal": name, "n": n, "x": x, "moves": moves})
    write("whole_method.json", "x(m + shift) by the method of doc.go in plain numpy, float64", cases=cases)

# ---------------------------------------------------------------- slice_code
def codes():
    cases = []
    for n, start, end, d in ((7, 1, 5, .1), (6, 0, 5, .25), (9, 0, 8, .125), (1, 0, 0, .5), (8, 2, 3, .25)):
        for code in range(1, 7):
            h = nib.Nifti1Header(); h.set_data_shape((4, 4, n, 2)); h.set_dim_info(slice=2)
            h["slice_code"], h["slice_start"], h["slice_end"] = code, start, end; h.set_slice_duration(d)
            if end == start and code > 4: continue # nibabel leaves these to chance
            cases.append({"code": code, "n": n, "start": start, "end": end, "duration": d, "times": h.get_slice_times()})
    write("slice_code.json", "nibabel Nifti1Header.get_slice_times; null: outside slice_start..slice_end", cases=cases)

if __name__ == "__main__":
    rng = np.random.default_rng(20)
    fourier(rng); sinc(); whole(rng); codes()
