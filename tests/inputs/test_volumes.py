from __future__ import annotations

import gzip
import hashlib
import struct
import warnings

import nibabel as nib
import numpy as np
import pytest
from nilearn.image import smooth_img

from seedaudit.errors import DataError
from seedaudit.inputs import stream
from seedaudit.inputs.volumes import first_volume, read_header, read_image, read_mask, read_run
from seedaudit.space.grid import Grid, VoxelSet
from tests.inputs.images import AFFINE, SHAPE, run_values, write_nifti


@pytest.fixture
def voxels():
    mask = np.random.default_rng(1).random(SHAPE) < 0.6
    return VoxelSet.from_mask(Grid(SHAPE, AFFINE), mask)


def reference(path, voxels):
    """Series as nibabel's own whole-array reader gives them (V last, scaled, float64)."""
    data = nib.load(path).get_fdata(dtype=np.float64)
    return data[tuple(voxels.ijk.T)].T


# Source: nibabel's get_fdata, an independent reader of the same bytes.
@pytest.mark.parametrize("code", ["i1", "u1", "i2", "u2", "i4", "u4", "i8", "u8", "f4", "f8"])
@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize(("name", "version"), [("a.nii", 1), ("a.nii.gz", 1), ("a.nii.gz", 2)])
def test_series_equal_nibabel(tmp_path, voxels, code, order, name, version):
    path = write_nifti(tmp_path / name, run_values(2), order + code, version=version)
    header = read_header(path)
    run = read_run(header, voxels)
    expected = reference(path, voxels)
    assert header.dtype == np.dtype(order + code)
    assert header.n_volumes == 9
    assert header.repetition_time == 2.0
    assert header.space_code == 4
    np.testing.assert_array_equal(run.series, (expected - expected[0]).astype(np.float32))
    np.testing.assert_array_equal(run.background, expected[0].astype(np.float32))
    assert run.series.dtype == run.background.dtype == np.float32
    assert run.finite.all()
    assert run.digest == hashlib.sha256(path.read_bytes()).hexdigest()
    np.testing.assert_allclose(header.grid.affine, nib.load(path).affine, atol=1e-6)


def test_scaling_cancels_in_correlations_and_is_applied_to_volumes(tmp_path, voxels):
    fields = {"scl_slope": -0.37, "scl_inter": 250.0}
    path = write_nifti(tmp_path / "a.nii.gz", run_values(3) * 200, ">i2", fields=fields)
    header = read_header(path)
    ours = np.corrcoef(read_run(header, voxels).series[:, :12].T)
    # Source: numpy.corrcoef on nibabel's scaled values.
    np.testing.assert_allclose(ours, np.corrcoef(reference(path, voxels)[:, :12].T), atol=1e-6)
    np.testing.assert_allclose(first_volume(header), nib.load(path).get_fdata()[..., 0], rtol=1e-6)


def test_small_signal_on_a_large_baseline_keeps_its_digits(tmp_path, voxels):
    signal = run_values(4) * 1e-3
    path = write_nifti(tmp_path / "a.nii", signal + 1e7, "<f8")
    run = read_run(read_header(path), voxels)
    expected = reference(path, voxels)
    np.testing.assert_allclose(run.series, expected - expected[0], rtol=1e-6, atol=1e-12)
    # int32 values that float32 cannot hold one by one
    path = write_nifti(tmp_path / "b.nii", np.round(signal * 1000) + 2.0**30, "<i4")
    expected = reference(path, voxels)
    np.testing.assert_array_equal(
        read_run(read_header(path), voxels).series, expected - expected[0]
    )


@pytest.mark.parametrize("smooth", [0.0, 5.0])
def test_voxels_that_are_not_finite_are_marked_and_zero(tmp_path, voxels, smooth):
    values = run_values(5)
    at = tuple(voxels.ijk[3])
    values[(*at, 4)] = np.nan
    values[(*voxels.ijk[8], 0)] = np.inf
    path = write_nifti(tmp_path / "a.nii", values, "<f4")
    run = read_run(read_header(path), voxels, smooth)
    assert np.flatnonzero(~run.finite).tolist() == [3, 8]
    assert not run.series[:, [3, 8]].any()
    assert np.isfinite(run.series).all()
    assert run.series[1:, run.finite].any(axis=0).all()


def test_difference_that_overflows_float32_is_marked(tmp_path, voxels):
    values = run_values(5)
    values[(*voxels.ijk[2], 3)] = 1e300
    run = read_run(read_header(write_nifti(tmp_path / "a.nii", values, "<f8")), voxels)
    assert np.flatnonzero(~run.finite).tolist() == [2]


@pytest.mark.parametrize("code", ["<i2", "<f8"])
def test_smoothing_equals_nilearn(tmp_path, voxels, code):
    # Source: nilearn.image.smooth_img, FWHM in mm on an anisotropic, oblique grid.
    values = run_values(6)
    if code == "<f8":
        values[2, 2, 2, 3] = np.nan
    path = write_nifti(tmp_path / "a.nii.gz", values, code)
    run = read_run(read_header(path), voxels, smooth=6.0)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        smoothed = smooth_img(str(path), 6.0).get_fdata()[tuple(voxels.ijk.T)].T
    kept = run.finite
    np.testing.assert_allclose(run.series[:, kept], (smoothed - smoothed[0])[:, kept], atol=2e-4)
    np.testing.assert_allclose(run.background, smoothed[0], rtol=1e-5)


def test_smoothing_with_an_intercept_takes_a_gap_as_zero_in_scaled_units(tmp_path, voxels):
    values = run_values(6)
    values[2, 2, 2, 3] = np.nan
    fields = {"scl_slope": 2.0, "scl_inter": -100.0}
    path = write_nifti(tmp_path / "a.nii", values, "<f4", fields=fields)
    run = read_run(read_header(path), voxels, smooth=6.0)
    smoothed = smooth_img(nib.load(path), 6.0).get_fdata()[tuple(voxels.ijk.T)].T  # as above
    expected = (smoothed - smoothed[0]) / 2
    np.testing.assert_allclose(run.series[:, run.finite], expected[:, run.finite], atol=2e-4)


def test_plain_gzip_gives_the_same_as_the_fast_one(tmp_path, voxels, monkeypatch):
    path = write_nifti(tmp_path / "a.nii.gz", run_values(7), "<i2")
    fast = read_run(read_header(path), voxels)
    monkeypatch.setattr(stream, "GzipFile", gzip.GzipFile)
    slow = read_run(read_header(path), voxels)
    np.testing.assert_array_equal(fast.series, slow.series)
    assert fast.digest == slow.digest


def test_gzip_is_told_by_content_and_may_have_several_members(tmp_path, voxels):
    plain = write_nifti(tmp_path / "a.nii", run_values(8), "<i2")
    content = plain.read_bytes()
    path = tmp_path / "b.nii"
    path.write_bytes(gzip.compress(content[:1000]) + gzip.compress(content[1000:]))
    run = read_run(read_header(path), voxels)
    np.testing.assert_array_equal(run.series, read_run(read_header(plain), voxels).series)
    assert run.digest == hashlib.sha256(path.read_bytes()).hexdigest()


def test_data_after_the_last_volume_are_digested_and_ignored(tmp_path, voxels):
    path = write_nifti(tmp_path / "a.nii", run_values(8), "<i2")
    path.write_bytes(path.read_bytes() + b"tail")
    assert read_run(read_header(path), voxels).digest == (
        hashlib.sha256(path.read_bytes()).hexdigest()
    )


def test_header_extension_moves_the_data(tmp_path, voxels):
    image = nib.Nifti1Image(run_values(9).astype(np.int16), AFFINE)
    image.header.extensions.append(nib.nifti1.Nifti1Extension("comment", b"x" * 100))
    nib.save(image, tmp_path / "a.nii.gz")
    header = read_header(tmp_path / "a.nii.gz")
    assert header.offset > 352
    expected = reference(tmp_path / "a.nii.gz", voxels)
    np.testing.assert_array_equal(read_run(header, voxels).series, expected - expected[0])


@pytest.mark.parametrize("module", ["isal", "gzip"])
def test_damaged_gzip_is_refused(tmp_path, voxels, monkeypatch, module):
    if module == "gzip":
        monkeypatch.setattr(stream, "GzipFile", gzip.GzipFile)
    whole = write_nifti(tmp_path / "a.nii.gz", run_values(10), "<f4").read_bytes()
    damaged = {
        "ends early": whole[: len(whole) // 2],
        "ends early (": whole[:-6],  # within the checksum
        "corrupt": whole[:-8] + bytes([whole[-8] ^ 1]) + whole[-7:],  # a wrong checksum
        "corrupt (": whole[:3000] + bytes(100) + whole[3100:],
    }
    for words, content in damaged.items():
        path = tmp_path / "b.nii.gz"
        path.write_bytes(content)
        with pytest.raises(DataError) as caught:
            read_run(read_header(path), voxels)
        assert "b.nii.gz" in str(caught.value)
        assert words in str(caught.value)


def test_gzip_that_holds_less_than_the_header_says(tmp_path, voxels):
    content = write_nifti(tmp_path / "a.nii", run_values(10), "<f4").read_bytes()
    path = tmp_path / "b.nii.gz"
    path.write_bytes(gzip.compress(content[:-500]))
    with pytest.raises(DataError, match="end within volume 9 of 9"):
        read_run(read_header(path), voxels)


def test_sizes_the_file_cannot_hold_are_refused_before_reading(tmp_path):
    short = write_nifti(tmp_path / "a.nii", run_values(11), "<f4")
    short.write_bytes(short.read_bytes()[:-1])
    with pytest.raises(DataError, match="asks for 7912 bytes"):
        read_header(short)
    huge = {"dim": [4, 30000, 30000, 30000, 30000, 1, 1, 1]}
    for name in ("b.nii", "b.nii.gz"):
        path = write_nifti(tmp_path / name, run_values(11), "<f4", fields=huge)
        with pytest.raises(DataError, match="asks for 3240000000000000352 bytes"):
            read_header(path)


def test_what_is_no_run_is_refused(tmp_path):
    values = run_values(12)

    def message(name, *args, **kwargs):
        with pytest.raises(DataError) as caught:
            read_header(write_nifti(tmp_path / name, *args, **kwargs))
        assert name in str(caught.value)
        return str(caught.value)

    assert "3-D image" in message("a.nii", values[..., 0])
    assert "3-D image" in message("b.nii", values[..., :1])
    assert "5 axes" in message("c.nii", values.reshape(*SHAPE, 3, 3))
    assert "complex64" in message("d.nii", values, "<c8")
    assert "float128" in message("e.nii", values, "<f8", fields={"datatype": 1536})
    assert "(RGB)" in message("f.nii", values, "<f4", fields={"datatype": 128})
    assert "datatype 7 (unknown)" in message("g.nii", values, "<f4", fields={"datatype": 7})
    assert "length at least 1" in message("h.nii", values, fields={"dim": [4, 7, 0, 6, 9, 1, 1, 1]})
    assert "length at least 1" in message("i.nii", values[0, 0, 0])
    assert "vox_offset" in message("j.nii", values, fields={"vox_offset": 0})
    assert "no affine is coded" in message("k.nii", values, sform_code=0)
    flat = np.diag([2.0, 2.0, 0.0, 1.0])
    assert "sform (code 4)" in message("l.nii", values, sform=flat)
    trailing = write_nifti(tmp_path / "m.nii", values[..., None], "<f4")
    assert read_header(trailing).n_volumes == 9


def test_all_problems_of_a_header_come_together(tmp_path):
    path = write_nifti(tmp_path / "a.nii", run_values(13)[..., 0], "<c8", sform_code=0)
    with pytest.raises(DataError) as caught:
        read_header(path)
    assert len(caught.value.problems) == 3


@pytest.mark.parametrize("content", [b"", b"participant_id\tbold\n" * 50, bytes(600), b"\x1f\x8b"])
def test_other_files_are_no_nifti(tmp_path, content):
    (tmp_path / "a.nii").write_bytes(content)
    with pytest.raises(DataError, match=r"a\.nii"):
        read_header(tmp_path / "a.nii")


def test_two_part_images_missing_files_and_folders(tmp_path):
    pair = write_nifti(tmp_path / "a.hdr", run_values(13), fields={"magic": b"ni1"})
    with pytest.raises(DataError, match="not a NIfTI file of one part"):
        read_header(pair)
    with pytest.raises(DataError, match="no such file"):
        read_header(tmp_path / "none.nii")
    with pytest.raises(DataError, match="cannot be read"):
        read_header(tmp_path)


def test_grid_of_the_voxels_must_be_that_of_the_run(tmp_path, voxels):
    flipped = AFFINE @ np.array(
        [[-1, 0, 0, SHAPE[0] - 1], [0, 1, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1]], float
    )
    path = write_nifti(tmp_path / "a.nii", run_values(14)[::-1], sform=flipped)
    with pytest.raises(DataError, match="another grid"):
        read_run(read_header(path), voxels)
    # Its own voxel list holds the same world points in the same order, so the same series.
    mask = np.zeros(SHAPE, bool)
    mask[tuple(voxels.ijk.T)] = True
    own = VoxelSet.from_mask(Grid(SHAPE, flipped), mask[::-1])
    straight = write_nifti(tmp_path / "b.nii", run_values(14))
    np.testing.assert_array_equal(
        read_run(read_header(path), own).series, read_run(read_header(straight), voxels).series
    )


# Source: the header examples of CHECKS 15c (nifti1.h; values recomputed with nibabel).
def test_the_standards_own_qform_example(tmp_path):
    fields = {
        "quatern_b": 1,
        "quatern_c": 0,
        "quatern_d": 0,
        "pixdim": [-1, 2, 3, 4, 2, 1, 1, 1],
        "qoffset_x": -9,
        "qoffset_y": 16,
        "qoffset_z": -20,
        "qform_code": 1,
    }
    values = run_values(15, 2)
    path = write_nifti(tmp_path / "a.nii", values, sform_code=0, fields=fields)
    header = read_header(path)
    expected = [[2, 0, 0, -9], [0, -3, 0, 16], [0, 0, 4, -20], [0, 0, 0, 1]]
    np.testing.assert_allclose(header.grid.affine, expected, atol=1e-6)
    assert header.space_code == 1
    assert header.warnings == ()

    rows = {"srow_x": [-2, 0, 0, 90], "srow_y": [0, 2, 0, -126], "srow_z": [0, 0, 2, -72]}
    both = write_nifti(tmp_path / "b.nii", values, fields=fields | rows | {"sform_code": 4})
    header = read_header(both)
    expected = [[-2, 0, 0, 90], [0, 2, 0, -126], [0, 0, 2, -72], [0, 0, 0, 1]]
    np.testing.assert_allclose(header.grid.affine, expected)
    (warning,) = header.warnings
    assert "sform (code 4) [[-2.0, 0.0, 0.0, 90.0]" in warning
    assert "qform (code 1) [[2.0, 0.0, 0.0, -9.0]" in warning
    assert str(tmp_path) not in warning

    turned = fields | {
        "quatern_b": 0,
        "quatern_d": np.sin(np.radians(15)),
        "pixdim": [1, 2, 2, 2, 2, 1, 1, 1],
    }
    header = read_header(write_nifti(tmp_path / "c.nii", values, sform_code=0, fields=turned))
    expected = [[1.7320508, -1, 0], [1, 1.7320508, 0], [0, 0, 2]]
    np.testing.assert_allclose(header.grid.affine[:3, :3], expected, atol=1e-6)


def test_forms_that_agree_or_a_broken_spare_form(tmp_path):
    agree = write_nifti(tmp_path / "a.nii", run_values(16), qform=AFFINE, qform_code=1)
    assert read_header(agree).warnings == ()
    broken = {"quatern_b": 1.0, "quatern_c": 1.0, "qform_code": 1}  # no unit quaternion
    path = write_nifti(tmp_path / "b.nii", run_values(16), fields=broken)
    (warning,) = read_header(path).warnings
    assert "qform (code 1) is not usable" in warning
    with pytest.raises(DataError, match=r"qform \(code 1\) is no usable affine"):
        read_header(write_nifti(tmp_path / "c.nii", run_values(16), sform_code=0, fields=broken))


# Source: xyzt_units of CHECKS 15b (nifti1.h): s 8, ms 16, us 24 in bits 4 to 6; Hz 32.
@pytest.mark.parametrize(
    ("units", "stored", "seconds"),
    [
        (10, 0.72, 0.72),
        (18, 720, 0.72),
        (26, 720000, 0.72),
        (2, 2.5, 2.5),
        (0, 2.5, 2.5),
        (10, 0, None),
        (10, -1, None),
        (10, np.nan, None),
        (34, 2, None),
    ],
)
def test_repetition_time(tmp_path, units, stored, seconds):
    fields = {"xyzt_units": units, "repetition_time": stored}
    header = read_header(write_nifti(tmp_path / "a.nii", run_values(17), fields=fields))
    assert header.repetition_time == (None if seconds is None else pytest.approx(seconds, abs=1e-9))
    assert header.warnings == ()


def test_other_units_of_space_are_warned_about(tmp_path):
    path = write_nifti(tmp_path / "a.nii", run_values(17), fields={"xyzt_units": 9})
    assert "metre" in read_header(path).warnings[0]


def test_mask(tmp_path):
    inside = np.random.default_rng(3).random(SHAPE) < 0.4
    grid = Grid(SHAPE, AFFINE)
    for code in ("<u1", ">f8"):
        values = inside[..., None] * 1.0
        mask, own = read_mask(write_nifti(tmp_path / "a.nii.gz", values, code), grid)
        np.testing.assert_array_equal(mask, inside)
        assert own.matches(grid)
    with_gap = np.where(inside, 1.0, np.nan)
    np.testing.assert_array_equal(read_mask(write_nifti(tmp_path / "b.nii", with_gap))[0], inside)
    # A stored 0 may stand for 1 (slope 1, intercept 1), and the other way round.
    fields = {"scl_slope": 1, "scl_inter": 1}
    path = write_nifti(tmp_path / "c.nii", inside * 1.0 - 1, "<i2", fields=fields)
    np.testing.assert_array_equal(read_mask(path)[0], inside)


def test_masks_that_are_refused(tmp_path):
    def message(values, grid=None):
        with pytest.raises(DataError) as caught:
            read_mask(write_nifti(tmp_path / "mask.nii", values), grid)
        return str(caught.value)

    ones = np.ones(SHAPE)
    assert "an empty mask" in message(0 * ones)
    assert "4 values beside 0 (1, 2, 3, ...)" in message(
        np.arange(np.prod(SHAPE)).reshape(SHAPE) % 5
    )
    assert "9 volumes" in message(run_values(18))
    moved = AFFINE.copy()
    moved[0, 3] += 1
    assert "first voxel at" in message(ones, Grid(SHAPE, moved))
    assert "shape 7 x 5 x 6" in message(ones, Grid((7, 6, 5), AFFINE))


def test_image_reader_checks_the_end_of_the_file(tmp_path):
    path = write_nifti(tmp_path / "a.nii.gz", run_values(19)[..., 0])
    values, grid = read_image(path)
    np.testing.assert_array_equal(values, nib.load(path).get_fdata())
    assert grid.shape == SHAPE
    whole = path.read_bytes()
    wrong = struct.pack("<I", struct.unpack("<I", whole[-8:-4])[0] ^ 1)
    path.write_bytes(whole[:-8] + wrong + whole[-4:])
    with pytest.raises(DataError, match="corrupt"):
        read_image(path)
