#!/usr/bin/env python3
"""open_outputs.py RAW OUT: opens every image of OUT with nibabel (Debian's python3-nibabel) and holds its affine, codes and voxel
sizes against the raw run's, bit for bit; prints how many were opened."""
import glob, os, sys
import nibabel as nib, numpy as np

raw, out = sys.argv[1:]
n = 0
for series in sorted(glob.glob(out + '/sub-*/**/func/*_desc-steady_bold.nii.gz', recursive=True)):
    stem = series[:-len('_desc-steady_bold.nii.gz')]
    source = [f for f in (raw + stem[len(out):] + '_bold' + e for e in ('.nii', '.nii.gz')) if os.path.exists(f)]
    ref = nib.load(source[0])
    for f in sorted(glob.glob(stem + '_desc-*.nii.gz')):
        im = nib.load(f)
        assert np.array_equal(im.affine, ref.affine), f
        for key in ('qform_code', 'sform_code', 'quatern_b', 'quatern_c', 'quatern_d', 'qoffset_x', 'qoffset_y', 'qoffset_z', 'srow_x', 'srow_y', 'srow_z', 'xyzt_units'):
            assert np.array_equal(im.header[key], ref.header[key]), (f, key)
        assert np.array_equal(im.header['pixdim'][:4], ref.header['pixdim'][:4]), f
        assert im.shape[:3] == ref.shape[:3], f
        d = np.asanyarray(im.dataobj)
        assert np.isfinite(d).all(), f
        if f == series:
            assert im.shape == ref.shape and im.header['pixdim'][4] == ref.header['pixdim'][4], f
            assert not im.header.extensions and bytes(im.header['descrip']).strip(b'\0') == b'', f
        else:
            assert im.ndim == 3, f
        if f.endswith('desc-head_mask.nii.gz'):
            assert set(np.unique(d)) == {0, 1} and im.get_data_dtype() == np.uint8, f
        n += 1
print(n)
