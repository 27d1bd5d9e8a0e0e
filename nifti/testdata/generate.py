"""Golden files of package nifti, made by nibabel and numpy.

Run as `python3 generate.py` in this folder. With EVENKEEL_TEST_SERIES set to
the folder of the real series it also writes series.json: their shapes, affines
and voxel statistics as nibabel gives them (no voxels).
"""
import base64, glob, gzip, json, os
import nibabel as nib
import numpy as np

HERE = os.path.dirname(os.path.abspath(__file__))
VERSIONS = {"numpy": np.__version__, "nibabel": nib.__version__}


def plain(v):
    if isinstance(v, np.ndarray):
        return plain(v.tolist())
    if isinstance(v, (list, tuple)):
        return [plain(x) for x in v]
    if isinstance(v, np.generic):
        return plain(v.item())
    if isinstance(v, bytes):
        return v.decode("latin1")
    return v


def write(name, content):
    with open(os.path.join(HERE, name), "w") as f:
        json.dump({"generated_by": "generate.py", "versions": VERSIONS, **content}, f, default=plain, separators=(",", ":"))
        f.write("\n")


# ------------------------------------------------------------------ headers
FIELDS = ["dim", "pixdim", "datatype", "bitpix", "dim_info", "slice_code", "slice_start", "slice_end", "slice_duration",
          "xyzt_units", "scl_slope", "scl_inter", "vox_offset", "toffset", "intent_code", "intent_p1", "intent_p2", "intent_p3",
          "quatern_b", "quatern_c", "quatern_d", "qoffset_x", "qoffset_y", "qoffset_z", "qform_code", "sform_code",
          "srow_x", "srow_y", "srow_z"]


def headers():
    out = []
    for cls, version in ((nib.Nifti1Header, 1), (nib.Nifti2Header, 2)):
        for order in "<>":
            h = cls(endianness=order)
            h.set_data_dtype(np.int16)
            # Every number differs from every other, so that no two fields can change places unseen.
            h["dim"] = [4, 61, 62, 33, 241, 1, 1, 1]
            h["pixdim"] = [-1, 3.1, 3.2, 3.6, 2.2, 5.5, 6.5, 7.5]
            h.set_xyzt_units("mm", "sec")
            h.set_dim_info(freq=0, phase=1, slice=2)
            h["slice_code"], h["slice_start"], h["slice_end"], h["slice_duration"] = 3, 2, 31, 0.0625
            h["scl_slope"], h["scl_inter"] = 0.5, -10
            h["vox_offset"] = 368 if version == 1 else 560
            h["toffset"] = 1.125
            h["intent_code"], h["intent_p1"], h["intent_p2"], h["intent_p3"] = 5, 11.5, 12.5, 13.5
            h["quatern_b"], h["quatern_c"], h["quatern_d"] = 0.1, -0.2, 0.3
            h["qoffset_x"], h["qoffset_y"], h["qoffset_z"] = 88.5, -101.25, -60.75
            h["qform_code"], h["sform_code"] = 1, 2
            h["srow_x"], h["srow_y"], h["srow_z"] = [-3.1, 0.01, 0.02, 94.5], [0.03, 3.2, 0.04, -94.25], [0.05, 0.06, 3.6, -56.5]
            h["descrip"], h["intent_name"], h["aux_file"] = b"free text", b"a name", b"a file"
            h["cal_max"], h["cal_min"] = 77.5, 7.5
            h["magic"] = b"n+1" if version == 1 else b"n+2"
            out.append({"version": version, "order": "little" if order == "<" else "big",
                        "base64": base64.b64encode(h.binaryblock).decode(),
                        "fields": {k: plain(np.atleast_1d(h[k])) for k in FIELDS},
                        "sform": plain(h.get_sform()), "qform": plain(h.get_qform())})
    write("headers.json", {"description": "headers as nibabel writes them", "headers": out})


# --------------------------------------------------------------- quaternions
def quaternions():
    s = np.sqrt
    defs = [("identity", (0, 0, 0), (3, 3, 4), 1, (-90, -126, -72)),
            ("left-handed axial", (0, 1, 0), (3.75, 3.75, 5), -1, (120, -100, -50)),
            ("example of the header text", (1, 0, 0), (2, 2, 2), -1, (0, 0, 0)),
            ("quarter turn about z", (0, 0, s(.5)), (2, 2.5, 3), 1, (10, 20, 30)),
            ("30 degrees about x", (np.sin(np.pi / 12), 0, 0), (3, 3, 3.5), 1, (-95.5, -80.25, -40)),
            ("oblique, left-handed", (0.1, -0.2, 0.3), (2.5, 2.5, 3.3), -1, (88.5, -101.25, -60.75)),
            ("120 degrees about 111", (.5, .5, .5), (1, 2, 3), 1, (0, 0, 0)),
            ("a little over one by rounding", (.6, .8, 1e-4), (1, 1, 1), 1, (0, 0, 0)),
            ("qfac 0", (0.1, -0.2, 0.3), (2, 3, 4), 0, (1, 2, 3))]
    cases = []
    for name, bcd, pix, qfac, off in defs:
        h = nib.Nifti1Header()
        h["quatern_b"], h["quatern_c"], h["quatern_d"] = bcd
        h["pixdim"][0], h["pixdim"][1:4] = qfac, pix
        h["qoffset_x"], h["qoffset_y"], h["qoffset_z"] = off
        h["qform_code"] = 1
        b, c, d = (float(h["quatern_" + k]) for k in "bcd")
        # nifti1.h, METHOD 2, in float64 from the float32 fields.
        n2 = b * b + c * c + d * d
        if 1 - n2 < 1e-7:  # nifti2_io.c
            b, c, d = np.array([b, c, d]) / np.sqrt(n2)
            a = 0.0
        else:
            a = np.sqrt(1 - n2)
        R = np.array([[a*a+b*b-c*c-d*d, 2*(b*c-a*d), 2*(b*d+a*c)], [2*(b*c+a*d), a*a+c*c-b*b-d*d, 2*(c*d-a*b)],
                      [2*(b*d-a*c), 2*(c*d+a*b), a*a+d*d-b*b-c*c]])
        A = np.eye(4)
        p = h["pixdim"].astype(float)
        A[:3, :3] = R @ np.diag([p[1], p[2], p[3] * (-1 if qfac < 0 else 1)])
        A[:3, 3] = off
        if qfac == 0:
            h["pixdim"][0] = 1  # nibabel wants -1 or 1
        cases.append({"name": name, "quatern": plain(np.array([h["quatern_" + k] for k in "bcd"], float)), "pixdim": plain(p[1:4]),
                      "qfac": qfac, "qoffset": list(off), "affine": plain(A), "nibabel": plain(h.get_qform())})
    write("quaternions.json", {"description": "affines of qforms: by the formula in float64, and as nibabel gives them", "cases": cases})


# -------------------------------------------------------------------- images
TYPES = ["u1", "i1", "u2", "i2", "u4", "i4", "u8", "i8", "f4", "f8"]


def voxels(code, shape, rng):
    n = int(np.prod(shape))
    if code[0] == "f":
        v = rng.normal(0, 1000, n)
        v[:4] = [0, -0.0, 1e-3, -32768.5]
        return v.astype(code)
    info = np.iinfo(code)
    v = rng.integers(0, 100, n).astype(code)
    v[0], v[-1], v[1] = info.min, info.max, info.max // 3
    return v


def image(name, cls, order, code, shape, rng, slope=None, inter=None, extension=b"", units=("mm", "sec"), zooms=(2, 2.5, 3, 1.5)):
    h = cls(endianness=order)
    h.set_data_dtype(np.dtype(code).newbyteorder(order))
    h.set_data_shape(shape)
    h.set_zooms(zooms[:len(shape)])
    h.set_xyzt_units(*units)
    A = np.array([[-2, 0.1, 0, 10], [0.1, 2.5, 0.2, -20], [0, -0.2, 3, 30], [0, 0, 0, 1.]])
    h.set_sform(A, 1)
    h.set_qform(A, 1)
    if slope is not None:
        h["scl_slope"], h["scl_inter"] = slope, inter
    size = len(h.binaryblock)
    pair = name.endswith((".hdr", ".hdr.gz"))
    h["vox_offset"] = 0 if pair else size + 4 + len(extension)
    h["magic"] = ((b"ni" if pair else b"n+") + (b"1" if size == 348 else b"2"))
    head = h.binaryblock + (b"\1\0\0\0" if extension else b"\0\0\0\0") + extension
    data = voxels(code, shape, rng).astype(np.dtype(code).newbyteorder(order)).tobytes()
    parts = {name: head, name.replace(".hdr", ".img"): data} if pair else {name: head + data}
    for part, content in parts.items():
        if part.endswith(".gz"):
            content = gzip.compress(content, mtime=0)
        with open(os.path.join(HERE, "images", part), "wb") as f:
            f.write(content)
    path = os.path.join(HERE, "images", name)
    img = nib.load(path.replace(".hdr", ".img") if pair else path)
    got = np.asarray(img.dataobj, dtype=np.float64).astype(np.float32)
    return {"file": name, "version": 1 if size == 348 else 2, "type": np.dtype(code).name, "order": "little" if order == "<" else "big",
            "shape": list(shape), "affine": plain(img.affine), "seconds": zooms[3] * {"sec": 1, "msec": 1e-3, "usec": 1e-6}[units[1]],
            "values": plain(got.astype(float).ravel(order="F"))}


def images():
    rng = np.random.default_rng(7)
    os.makedirs(os.path.join(HERE, "images"), exist_ok=True)
    out = []
    for code in TYPES:
        name = np.dtype(code).name
        out.append(image(f"{name}_1_little.nii", nib.Nifti1Header, "<", code, (3, 2, 2, 2), rng))
        out.append(image(f"{name}_1_big.nii.gz", nib.Nifti1Header, ">", code, (3, 2, 2, 2), rng))
        out.append(image(f"{name}_2_little.nii.gz", nib.Nifti2Header, "<", code, (1, 3, 2, 2), rng))
        out.append(image(f"{name}_2_big.nii", nib.Nifti2Header, ">", code, (3, 1, 2, 2), rng))
    for code in ("u1", "i2", "f4"):
        name = np.dtype(code).name
        out.append(image(f"{name}_scaled.nii.gz", nib.Nifti1Header, "<", code, (3, 2, 2, 2), rng, slope=0.37, inter=-12.25))
    out.append(image("pair_1.hdr", nib.Nifti1Pair.header_class, "<", "i2", (3, 2, 2, 2), rng))
    out.append(image("pair_2.hdr", nib.Nifti2Pair.header_class, ">", "u2", (3, 2, 2, 2), rng, units=("mm", "msec")))
    out.append(image("three.nii", nib.Nifti1Header, "<", "i2", (3, 2, 5), rng))
    note = b"a comment" + bytes(16 * 2 - 8 - 9)
    out.append(image("extension.nii.gz", nib.Nifti1Header, "<", "i2", (3, 2, 2, 2), rng, units=("mm", "usec"),
                     extension=np.array([32, 6], "<i4").tobytes() + note))
    write("images.json", {"description": "small files of every voxel type and the values that nibabel reads from them, x fastest", "images": out})


# -------------------------------------------------------------------- series
def series():
    root = os.environ.get("EVENKEEL_TEST_SERIES")
    if not root:
        print("EVENKEEL_TEST_SERIES is not set: series.json left as it is")
        return
    out = []
    for path in sorted(glob.glob(os.path.join(root, "sub-*", "func", "*_bold.nii.gz"))):
        img = nib.load(path)
        v = np.asarray(img.dataobj, dtype=np.float64)
        h = img.header
        out.append({"file": os.path.relpath(path, root).replace(os.sep, "/"), "shape": list(v.shape), "type": h.get_data_dtype().name,
                    "affine": plain(img.affine), "pixdim4": float(h["pixdim"][4]), "sum": float(v.sum()), "sum_squares": float((v * v).sum()),
                    "last_volume_sum": float(v[..., -1].sum()), "max": float(v.max()), "max_at": [int(i) for i in np.unravel_index(v.ravel(order="F").argmax(), v.shape, order="F")]})
    write("series.json", {"description": "the real series as nibabel reads them", "series": out})


headers()
quaternions()
images()
series()
