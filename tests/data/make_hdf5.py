#!/usr/bin/env python3
"""Writes the HDF5 files of tests/hdf5_files.rs:  python make_hdf5.py [FOLDER]   (needs numpy, h5py, netCDF4)

Every usable file holds the field u = 10 j + i + 100 k, v = -u / 2 at row j, column i, frame k of a 4 x 6 grid,
x = 2 i, y = 3 j, unless said otherwise beside it.
"""

import sys
from pathlib import Path

import h5py
import netCDF4
import numpy as np

NY, NX = 4, 6
HERE = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent / "hdf5"
X, Y = 2.0 * np.arange(NX), 3.0 * np.arange(NY)


def field(frames=None):
    j, i = np.mgrid[:NY, :NX]
    u = 10.0 * j + i
    if frames is not None:
        u = u[None] + 100.0 * np.arange(frames)[:, None, None]
    return u, -u / 2


def write(name, datasets, **options):
    """Datasets: path -> array or entry(array, keywords of create_dataset, attributes)."""
    with h5py.File(HERE / name, "w", **options) as f:
        for path, what in datasets.items():
            data, keywords, attributes = what if isinstance(what, tuple) else (what, {}, {})
            d = f.create_dataset(path, data=data, **keywords)
            d.attrs.update(attributes)


def entry(data, keywords=None, attributes=None):
    return (data, keywords or {}, attributes or {})


U, V = field()
HERE.mkdir(exist_ok=True)
axes = {"x": X, "y": Y}

# ---- usable
write("plain.h5", {"u": U, "v": V, **axes})
packed = dict(chunks=(3, 4), compression="gzip", shuffle=True)
write("f32_big_endian_gzip.h5", {"u": entry(U.astype(">f4"), packed), "v": entry(V.astype(">f4"), packed), **axes})
write("f16_lzf.h5", {n: entry(a.astype("f2"), dict(chunks=(2, 6), compression="lzf")) for n, a in (("u", U), ("v", V))} | axes)
write("u16_scale_offset.h5", {"u": entry(U.astype(">u2"), dict(chunks=(4, 6), scaleoffset=0)), "v": entry(V, dict(chunks=(4, 6), fletcher32=True)), **axes})
scaled = {"scale_factor": 0.5, "add_offset": 1.0, "_FillValue": np.int16(-32768)}
stored = np.rint((U - 1.0) / 0.5).astype("i2")
stored[1, 2] = -32768
write("i16_scaled_fill.h5", {"u": entry(stored, {}, scaled), "v": V, **axes})
gap = U.astype("f4")
gap[1, 2] = -999.9
write("missing_value_double.h5", {"u": entry(gap, {}, {"missing_value": -999.9}), "v": V, **axes})
with h5py.File(HERE / "fill_of_storage.h5", "w") as f:  # node (1, 2) holds the fill value of the dataset
    d = f.create_dataset("u", (NY, NX), "f8", fillvalue=-7e9)
    g = U.copy()
    g[1, 2] = -7e9
    d[...] = g
    f["v"], f["x"], f["y"] = V, X, Y
write("x_y_order.h5", {"u": U.T, "v": V.T, **axes})
US, VS = field(3)
write("series.h5", {"u": US, "v": VS, "t": np.array([0.5, 1.0, 1.5]), **axes})
write("series_time_last.h5", {"u": np.moveaxis(US, 0, 2), "v": np.moveaxis(VS, 0, 2), "time": np.arange(3.0), **axes})
write("singletons.h5", {"u": U[None, :, None, :], "v": V[None, :, None, :], "x": X[None], "y": Y[:, None]})
write(
    "nested_synonyms.h5",
    {
        "run3/velocity_x": entry(U, {}, {"units": "mm/s"}),
        "run3/velocity_y": entry(V, {}, {"units": np.bytes_("mm/s")}),
        "run3/X": entry(X, {}, {"units": "mm"}),
        "run3/Y": Y,
        "notes": np.array([b"a text"]),
    },
)
write("two_runs.h5", {"run1/u": U, "run1/v": V, "run2/u": U + 1000, "run2/v": V, **axes})
with h5py.File(HERE / "links.h5", "w") as f:  # further names of one dataset are no second candidate
    f["run/u"], f["run/v"] = U, V
    f["latest"] = h5py.SoftLink("/run")
    f["run/vx"] = f["run/u"]
    f["run/loop"] = f["run"]
    f["gone"] = h5py.SoftLink("/nowhere")
    f["far"] = h5py.ExternalLink("no_such_file.h5", "/u")
write(
    "sigma_valid_solid.h5",
    {
        "u": U, "v": V, **axes,
        "sigma_u": 0.25, "sigma_v": np.full((NY, NX), 0.5, "f4"),
        "valid": np.arange(NY * NX).reshape(NY, NX) != 9,
        "solid": np.eye(NY, NX, dtype="u1"),
        "depth": np.arange(3.0),
    },
)
with h5py.File(HERE / "square_scales.h5", "w") as f:  # 5 x 5, x first, u = 10 j + i
    j, i = np.mgrid[:5, :5]
    f["u"], f["v"] = (10.0 * j + i).T, (0.0 * j).T
    f["x"], f["y"] = np.arange(5.0), np.arange(5.0)
    f["x"].make_scale("x")
    f["y"].make_scale("y")
    for n in "uv":
        f[n].dims[0].attach_scale(f["x"])
        f[n].dims[1].attach_scale(f["y"])
with h5py.File(HERE / "square_labels.h5", "w") as f:
    f["u"], f["v"] = (10.0 * j + i).T, (0.0 * j).T
    f["u"].dims[0].label, f["u"].dims[1].label = "x", "y"
write("square.h5", {"u": 10.0 * j + i, "v": 0.0 * j})
mx, my = np.meshgrid(X, Y)
write("mesh_transposed.h5", {"u": U.T, "v": V.T, "x": mx.T, "y": my.T})
sx, sy = np.meshgrid(np.arange(5.0), np.arange(5.0))
write("mesh_square_transposed.h5", {"u": (10.0 * j + i).T, "v": 0.0 * i.T, "x": sx.T, "y": sy.T})


def matlab(name, arrays):
    with h5py.File(HERE / name, "w", userblock_size=512) as f:
        for n, a in arrays.items():
            f[n] = np.asarray(a, "f8").T  # MATLAB stores column by column
            f[n].attrs["MATLAB_class"] = np.bytes_("double")
        f.create_group("#refs#")["u"] = np.zeros((2, 2))
    with open(HERE / name, "r+b") as f:
        f.write(b"MATLAB 7.3 MAT-file, Platform: GLNXA64".ljust(116) + b" " * 8 + b"\x00\x02IM")


matlab("matlab73.mat", {"u": U, "v": V, "x": X[None], "y": Y[:, None]})
matlab("matlab73_square.mat", {"u": 10.0 * j + i, "v": 0.0 * j})
with netCDF4.Dataset(HERE / "cf.nc", "w") as f:  # names that say nothing, standard names that do
    f.Conventions = "CF-1.8"
    for n, size in (("time", None), ("y", NY), ("x", NX)):
        f.createDimension(n, size)
    for n, data, units in (("x", X, "mm"), ("y", Y, "mm"), ("time", np.array([4.0, 5.0]), "seconds since 2024-05-01")):
        d = f.createVariable(n, "f8", (n,))
        d[:] = data
        d.units = units
    for n, data, name in (("a", field(2)[0], "sea_water_x_velocity"), ("b", field(2)[1], "sea_water_y_velocity")):
        d = f.createVariable(n, "f4", ("time", "y", "x"), zlib=True)
        data = np.ma.masked_array(data)
        data[1, 1, 2] = np.ma.masked
        d[:] = data
        d.units, d.standard_name = "mm s-1", name
with netCDF4.Dataset(HERE / "dimensions_without_values.nc", "w") as f:
    f.createDimension("x", 5)
    f.createDimension("y", 5)
    for n, data in (("u", (10.0 * j + i).T), ("v", 0.0 * i)):
        f.createVariable(n, "f8", ("x", "y"))[:] = data

# ---- refused
write("bad_no_velocity.h5", {"pressure": U, "log/text": np.array([b"abc"])})
write("bad_text.h5", {"u": np.array([[b"1", b"2"], [b"3", b"4"]]), "v": V})
write("bad_complex.h5", {"u": U + 1j * V, "v": V})
write("bad_list.h5", {"u": U.ravel(), "v": V.ravel()})
write("bad_volume.h5", {"u": np.zeros((2, 3, 4, 5)), "v": np.zeros((2, 3, 4, 5))})
write("bad_shapes_differ.h5", {"u": U, "v": V[:, :5], **axes})
write("bad_coordinate.h5", {"u": U, "v": V, "x": X[:5], "y": Y})
write("bad_sigma_shape.h5", {"u": U, "v": V, "sigma_u": np.ones((3, 3)), "sigma_v": np.ones((NY, NX))})
write("bad_units.h5", {"u": entry(U, {}, {"units": "mm/s"}), "v": entry(V, {}, {"units": "m/s"})})
with h5py.File(HERE / "bad_huge.h5", "w") as f:  # 64 TB promised by a small file
    for n in "uv":
        f.create_dataset(n, (1 << 22, 1 << 21), "f8", chunks=(1024, 1024), compression="gzip")
with h5py.File(HERE / "bad_huge_contiguous.h5", "w") as f:  # 32 MB promised
    for n in "uv":
        f.create_dataset(n, (2048, 2048), "f8")
with h5py.File(HERE / "bad_never_written.h5", "w") as f:
    for n in "uv":
        f.create_dataset(n, (NY, NX), "f4", chunks=(NY, NX))
write("bad_none.h5", {"u": np.zeros((0, 6)), "v": np.zeros((0, 6))})
with h5py.File(HERE / "bad_empty_space.h5", "w") as f:
    f["u"], f["v"] = h5py.Empty("f8"), V
with h5py.File(HERE / "bad_filter.h5", "w") as f:  # bytes said to be packed with Zstandard
    for n in "uv":
        plan = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
        plan.set_chunk((NY, NX))
        plan.set_filter(32015, h5py.h5z.FLAG_OPTIONAL, (3,))
        d = h5py.h5d.create(f.id, n.encode(), h5py.h5t.NATIVE_DOUBLE, h5py.h5s.create_simple((NY, NX)), plan)
        d.write_direct_chunk((0, 0), b"\x28\xb5\x2f\xfd" + bytes(60), 0)
whole = (HERE / "f32_big_endian_gzip.h5").read_bytes()
(HERE / "bad_cut_off.h5").write_bytes(whole[: len(whole) // 2])
(HERE / "bad_noise.h5").write_bytes(whole[:8] + bytes(range(256)) * 4)
with h5py.File(HERE / "bad_damaged_chunk.h5", "w") as f:
    for n in "uv":
        plan = h5py.h5p.create(h5py.h5p.DATASET_CREATE)
        plan.set_chunk((NY, NX))
        plan.set_deflate(4)
        d = h5py.h5d.create(f.id, n.encode(), h5py.h5t.NATIVE_DOUBLE, h5py.h5s.create_simple((NY, NX)), plan)
        d.write_direct_chunk((0, 0), bytes(range(80)), 0)
