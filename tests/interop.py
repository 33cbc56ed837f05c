"""Exchange of files with the Python libraries of the trade: what they write isopsi reads, what isopsi writes they read.

    python3 tests/interop.py target/release/isopsi

Needs numpy, scipy, h5py, netCDF4, xarray, h5netcdf, pandas.  Ends with `N passed, N failed`.
"""
import json
import pathlib
import subprocess
import sys
import tempfile
import traceback

import h5py
import netCDF4
import numpy as np
import pandas as pd
import scipy.io
import scipy.sparse as sp
import scipy.sparse.linalg as sl
import xarray as xr

BINARY = pathlib.Path(sys.argv[1]).resolve()
DEMO = pathlib.Path(__file__).resolve().parent.parent / "data-demo"


def isopsi(*arguments, code=0):
    out = subprocess.run([str(BINARY), *map(str, arguments)], capture_output=True, text=True)
    assert out.returncode == code, f"exit {out.returncode}: {out.stderr}"
    return out.stdout if code == 0 else out.stderr


def inspect(path, *arguments):
    return json.loads(isopsi("inspect", path, "--json", *arguments))


def flow(ny=17, nx=23):
    """Two vortices in a stream, exact, with one gap."""
    x, y = np.linspace(0, 2.2, nx), np.linspace(0, 1.6, ny)
    gx, gy = np.meshgrid(x, y)
    u = 1 + np.sin(2 * gx) * np.cos(2 * gy)
    v = -np.cos(2 * gx) * np.sin(2 * gy)
    u[5, 7] = v[5, 7] = np.nan
    return x, y, u, v


def same(path, *arguments):
    """The file holds the flow above: grid, gap, ranges."""
    x, y, u, v = flow()
    seen = inspect(path, *arguments)
    assert seen["grid"]["x"]["nodes"] == x.size and seen["grid"]["y"]["nodes"] == y.size, seen["grid"]
    assert abs(seen["grid"]["x"]["last"] - x[-1]) < 1e-6 and abs(seen["grid"]["y"]["last"] - y[-1]) < 1e-6
    assert seen["vectors"]["gaps"] == 1, seen["vectors"]
    for name, array in (("u", u), ("v", v)):
        assert np.allclose(seen[name], [np.nanmin(array), np.nanmax(array)], atol=2e-3), (name, seen[name])
    return seen


def reads_h5py(folder):
    x, y, u, v = flow()
    for dtype in ("<f8", ">f8", "<f4", ">f4", "<f2"):
        for compression in (None, "gzip", "lzf"):
            path = folder / "a.h5"
            with h5py.File(path, "w") as f:
                g = f.create_group("run3/plane")
                g["x"], g["y"] = x, y
                g["x"].attrs["units"] = "mm"
                for name, a in (("u", u), ("v", v)):
                    g.create_dataset(name, data=a.astype(dtype), compression=compression, shuffle=compression is not None).attrs["units"] = "mm s-1"
            assert same(path)["units"] == {"length": "mm", "velocity": "mm s-1"}


def reads_packed_integers_in_h5py(folder):
    x, y, u, v = flow()
    path = folder / "packed.h5"
    for kind in ("<i2", ">i2", "<i4", "u1"):
        with h5py.File(path, "w") as f:
            f["x"], f["y"] = x, y
            for name, a in (("u", u), ("v", v)):
                low, high = np.nanmin(a), np.nanmax(a)
                top = 250 if kind == "u1" else 30000
                scale = (high - low) / top
                packed = np.where(np.isnan(a), top + 1, np.round((np.nan_to_num(a) - low) / scale)).astype(kind)
                d = f.create_dataset(name, data=packed)
                d.attrs["scale_factor"], d.attrs["add_offset"], d.attrs["_FillValue"] = scale, low, np.array(top + 1, kind)
        x_, y_, u_, v_ = flow()
        seen = inspect(path)
        assert seen["vectors"]["gaps"] == 1
        assert np.allclose(seen["u"], [np.nanmin(u_), np.nanmax(u_)], atol=0.02)


def reads_matlab_style(folder):
    """As MATLAB 7.3 writes: a 512-byte user block, arrays transposed."""
    x, y, u, v = flow()
    path = folder / "m.mat"
    with h5py.File(path, "w", userblock_size=512) as f:
        f["u"], f["v"] = u.T, v.T
        f["x"], f["y"] = x[:, None], y[:, None]
    with open(path, "r+b") as f:
        f.write(b"MATLAB 7.3 MAT-file, Platform: GLNXA64".ljust(512, b" "))
    same(path)
    with h5py.File(path, "w", userblock_size=512) as f:                       # coordinates as a mesh
        gx, gy = np.meshgrid(x, y)
        f["U"], f["V"], f["X"], f["Y"] = u.T, v.T, gx.T, gy.T
    same(path)


def refuses_what_hdf5_can_get_wrong(folder):
    x, y, u, v = flow()
    path = folder / "bad.h5"

    def says(fill, *parts, code=4, extra=()):
        with h5py.File(path, "w") as f:
            fill(f)
        message = isopsi("inspect", path, *extra, code=code)
        for part in parts:
            assert part in message, (part, message)

    def pair(f, u=u, v=v):
        f["u"], f["v"] = u, v

    says(lambda f: None, "array u", "not found", "no datasets")
    says(lambda f: f.create_dataset("u", data=u), "array v", "--array v=/path")
    says(lambda f: (pair(f), f.create_dataset("other/u", data=u)), "2 candidates", "/other/u", "--array u=")
    says(lambda f: pair(f, v=v[:-1]), "shapes differ")
    says(lambda f: pair(f, u[0], v[0]), "expected (ny, nx)")
    says(lambda f: (f.create_dataset("u", data=np.array([[b"a", b"b"]] * 2)), f.create_dataset("v", data=np.zeros((2, 2)))), "expected real numbers")
    says(lambda f: (pair(f), f.create_dataset("x", data=x[:-3]), f.create_dataset("y", data=y)), "does not fit")
    says(pair, "frame 4", code=4, extra=("--frames", "4"))
    says(pair, "not in the file", extra=("--array", "u=/nowhere"))
    says(lambda f: pair(f, np.full_like(u, np.nan), v), "are gaps")
    says(lambda f: pair(f, np.where(np.isnan(u), np.inf, u), v), "infinite")
    with h5py.File(path, "w") as f:                                            # 1.4 kB that claim 64 TB
        for name in ("u", "v"):
            f.create_dataset(name, shape=(2_000_000, 2_000, 2_000), dtype="f8", chunks=(1, 100, 100))
    assert path.stat().st_size < 10_000
    message = isopsi("inspect", path, code=4)
    assert "no value was ever written" in message, message
    with h5py.File(path, "w") as f:
        pair(f)
    data = path.read_bytes()
    for cut in (100, 1000, len(data) // 2, len(data) - 100):
        path.write_bytes(data[:cut])
        message = isopsi("inspect", path, code=4)
        assert "panicked" not in message and "bad.h5" in message
    rng = np.random.default_rng(0)
    for _ in range(60):                                                        # random damage: an answer or one error, no crash
        broken = bytearray(data)
        for at in rng.integers(0, len(data), 12):
            broken[at] = rng.integers(0, 256)
        path.write_bytes(bytes(broken))
        out = subprocess.run([str(BINARY), "inspect", str(path)], capture_output=True, text=True)
        assert out.returncode in (0, 4) and "panicked" not in out.stderr, (out.returncode, out.stderr)


def reads_netcdf4_and_xarray(folder):
    x, y, u, v = flow()
    path = folder / "n.nc"
    with netCDF4.Dataset(path, "w") as f:
        for name, values in (("time", [0.0, 0.5]), ("lat", y), ("lon", x)):
            f.createDimension(name, len(values))
        for name, values, std in (("y", y, "projection_y_coordinate"), ("x", x, "projection_x_coordinate")):
            f.createVariable(name, "f8", ("lat" if name == "y" else "lon",))[:] = values
        for name, a, std in (("eastward", u, "sea_water_x_velocity"), ("northward", v, "sea_water_y_velocity")):
            d = f.createVariable(name, "f4", ("time", "lat", "lon"), zlib=True, fill_value=-999.0)
            d.standard_name = std
            d.units = "m s-1"
            d[:] = np.ma.masked_invalid(np.stack([a, 2 * a]))
    same(path)
    assert inspect(path)["frames"] == 2
    path = folder / "x.nc"
    xr.Dataset({"u": (("y", "x"), u), "v": (("y", "x"), v)}, {"x": x, "y": y}).to_netcdf(path)
    same(path)


def reads_numpy_and_pandas(folder):
    x, y, u, v = flow()
    np.savez(folder / "a.npz", u=u, v=v, x=x, y=y)
    same(folder / "a.npz")
    np.savez_compressed(folder / "b.npz", u=np.asfortranarray(u), v=v.astype(">f4"), x=x, y=y)
    same(folder / "b.npz")
    for dtype in ("<f8", ">f8", "<f4", "<f2"):
        for order in "CF":
            np.save(folder / "a.npy", np.asarray(np.stack([u, v]), dtype=dtype, order=order))
            same(folder / "a.npy", "--spacing", "0.1,0.1")
    gx, gy = np.meshgrid(x, y)
    table = pd.DataFrame({"x": gx.ravel(), "y": gy.ravel(), "u": u.ravel(), "v": v.ravel()})
    table.to_csv(folder / "a.csv", index=False)
    same(folder / "a.csv")
    table.sample(frac=1, random_state=1).dropna().to_csv(folder / "b.tsv", index=False, sep="\t")
    same(folder / "b.tsv")
    table.to_csv(folder / "c.csv", index=False, sep=";", decimal=",")
    same(folder / "c.csv")
    np.savetxt(folder / "d.txt", table.dropna().values, header="x y u v", comments="% ")
    same(folder / "d.txt", "--columns", "x,y,u,v")


def refuses_old_formats_with_advice(folder):
    x, y, u, v = flow()
    scipy.io.savemat(folder / "old.mat", {"u": u, "v": v})
    assert "-v7.3" in isopsi("inspect", folder / "old.mat", code=4)
    with netCDF4.Dataset(folder / "classic.nc", "w", format="NETCDF3_CLASSIC") as f:
        f.createDimension("x", 3)
    assert "nccopy" in isopsi("inspect", folder / "classic.nc", code=4)


def writes_fields_that_xarray_opens(folder):
    out = folder / "results"
    isopsi("run", DEMO / "flume.toml", "--out", out, "--quiet")
    for engine in ("netcdf4", "h5netcdf"):
        with xr.open_dataset(out / "field.h5", engine=engine) as d:
            assert dict(d.sizes) == {"time": 1, "y": 38, "x": 101}, d.sizes
            assert d.u.dims == ("time", "y", "x") and d.psi.units == "mm2 s-1" and d.x.units == "mm"
            assert d.attrs["Conventions"] == "CF-1.11" and d.psi.attrs["long_name"] == "stream function"
            assert list(d.flag.attrs["flag_masks"]) == [1, 2, 4, 8, 16]
            assert d.flag.attrs["flag_meanings"] == "measured screened filled extrapolated solid"
            solid = (d.flag.values & 16) > 0
            assert solid.sum() == 96 or 80 < solid.sum() < 120
            assert np.isnan(d.psi.values[solid]).all() and np.isnan(d.u.values[solid]).all()
            # psi and its velocity belong together: central differences inside agree within truncation.
            psi = d.psi.values[0]
            u = (psi[2:, 1:-1] - psi[:-2, 1:-1]) / 6.0
            good = np.isfinite(u)
            assert np.nanmedian(np.abs(u - d.u_fit.values[0][1:-1, 1:-1])[good]) < 0.5
    for name in ("stagnation", "streamlines", "lines", "cells"):
        table = pd.read_csv(out / f"{name}.csv", comment="#")
        assert len(table) > 0, name
        assert (out / f"{name}.csv").read_text().startswith("# units: ")
    points = pd.read_csv(out / "stagnation.csv", comment="#")
    assert list(points.columns) == ("frame,id,kind,x,y,psi,sigma_psi,sigma_x,sigma_y,rho_xy,rate,period,persistence,z,share,flag,notes").split(",")
    assert points.sigma_psi.isna().all()                                       # not computed yet: empty, never zero
    summary = json.loads((out / "summary.json").read_text())
    assert summary["verdict"] == "consistent" and summary["vectors"]["screened"] > 30
    assert same_sum(summary["inputs"][0]["sha256"], DEMO / "flume.csv")
    # the known truth of the invented data
    center = points[points.kind == "center"].iloc[0]
    assert np.hypot(center.x - 79.30, center.y - 13.25) < 2.0 and abs(center.psi + 234.4) < 20
    cell = pd.read_csv(out / "cells.csv", comment="#").iloc[0]
    assert abs(cell.wall_length - 73.7) < 6, cell.wall_length


def same_sum(text, path):
    import hashlib
    return hashlib.sha256(path.read_bytes()).hexdigest() == text


def cleans_into_every_format(folder):
    x, y, u, v = flow()
    u[9, 9] = 40.0                                                             # one bad vector
    np.savez(folder / "in.npz", u=u, v=v, x=x, y=y)
    for name in ("c.h5", "c.npz", "c.csv", "c.npy", "c.nc"):
        isopsi("clean", folder / "in.npz", "--out", folder / name, "--sigma", "0.01", "--quiet")
        extra = ("--spacing", "0.1,0.1") if name == "c.npy" else ()
        seen = inspect(folder / name, *extra)
        assert seen["vectors"]["gaps"] == 0 and seen["u"][1] < 2.5, (name, seen["vectors"], seen["u"])
    with np.load(folder / "c.npz") as z:
        assert z["flag"][9, 9] == 1 | 2 | 4 and z["flag"][5, 7] == 4 and z["flag"][0, 0] == 1
        assert abs(z["u"][9, 9] - (1 + np.sin(2 * x[9]) * np.cos(2 * y[9]))) < 0.02
    assert list(pd.read_csv(folder / "c.csv", comment="#").columns)[:4] == ["x", "y", "u", "v"]


def gives_the_psi_of_scipy(folder):
    """The same weighted least squares, written here with sparse matrices and solved by SciPy, agrees to 1e-9 of the range."""
    rng = np.random.default_rng(5)
    for ny, nx, gap in ((29, 41, False), (31, 31, True)):
        x, y = np.linspace(0, 2, nx), np.linspace(0, 1, ny)
        gx, gy = np.meshgrid(x, y)
        u = np.cos(3 * gx) * np.sin(4 * gy) + 0.1 * rng.standard_normal(gx.shape)
        v = np.sin(2 * gx + gy) + 0.1 * rng.standard_normal(gx.shape)
        if gap:
            hole = np.hypot(gx - 0.9, gy - 0.5) < 0.2
            u[hole] = v[hole] = np.nan
        np.savez(folder / "s.npz", u=u, v=v, x=x, y=y)
        isopsi("psi", folder / "s.npz", "--out", folder / "p.npz", "--no-screen", "--quiet", "--psi-zero", "mean")
        with np.load(folder / "p.npz") as z:
            ours = z["psi"]
        theirs = scipy_psi(u, v, x[1] - x[0], y[1] - y[0])
        ok = np.isfinite(theirs)
        assert np.isfinite(ours[ok]).all()
        difference = (ours - theirs)[ok]
        difference -= difference.mean()
        assert np.abs(difference).max() < 1e-9 * np.ptp(theirs[ok]), np.abs(difference).max()


def scipy_psi(u, v, dx, dy):
    ok = np.isfinite(u) & np.isfinite(v)
    ny, nx = u.shape
    ids = np.arange(ny * nx).reshape(ny, nx)
    cell = np.pad(ok[:-1, :-1] & ok[1:, :-1] & ok[:-1, 1:] & ok[1:, 1:], 1)
    rows, data, weights = [], [], []
    for j in range(ny):
        for i in range(nx):
            for along_y in (True, False):
                line = [(j + k, i) if along_y else (j, i + k) for k in (-1, 0, 1, 2)]
                inside = [0 <= a < ny and 0 <= b < nx and ok[a, b] for a, b in line]
                if not (inside[1] and inside[2]):
                    continue
                h = dy if along_y else dx
                c = {(True, True): (-1 / 24, 13 / 24, 13 / 24, -1 / 24), (False, True): (0, 5 / 12, 8 / 12, -1 / 12),
                     (True, False): (-1 / 12, 8 / 12, 5 / 12, 0), (False, False): (0, 0.5, 0.5, 0)}[inside[0], inside[3]]
                f = u if along_y else -v
                q = h * sum(w * f[p] for w, p, o in zip(c, line, inside) if w and o)
                beside = int(cell[j + 1, i]) + int(cell[j + 1, i + 1]) if along_y else (int(cell[j, i + 1]) + int(cell[j + 1, i + 1]))
                share = 0.25 if beside == 0 else 0.5 * beside
                rows.append((ids[line[1]], ids[line[2]]))
                data.append(q)
                weights.append(share * (dx / dy if along_y else dy / dx))
    a = np.array(rows)
    n = len(rows)
    d = sp.csr_matrix((np.r_[-np.ones(n), np.ones(n)], (np.r_[np.arange(n), np.arange(n)], np.r_[a[:, 0], a[:, 1]])), (n, ny * nx))
    w = sp.diags(weights)
    matrix = (d.T @ w @ d).tocsc()
    used = np.flatnonzero(np.diff(d.tocsc().indptr))
    free = used[1:]
    psi = np.full(ny * nx, np.nan)
    psi[used[0]] = 0
    psi[free] = sl.spsolve(matrix[free][:, free], (d.T @ w @ np.array(data))[free])
    return psi.reshape(ny, nx)


def main():
    checks = [reads_h5py, reads_packed_integers_in_h5py, reads_matlab_style, refuses_what_hdf5_can_get_wrong,
              reads_netcdf4_and_xarray, reads_numpy_and_pandas, refuses_old_formats_with_advice,
              writes_fields_that_xarray_opens, cleans_into_every_format, gives_the_psi_of_scipy]
    failed = 0
    for check in checks:
        with tempfile.TemporaryDirectory() as folder:
            try:
                check(pathlib.Path(folder))
                print(f"ok      {check.__name__}", flush=True)
            except Exception:
                failed += 1
                print(f"FAILED  {check.__name__}\n{traceback.format_exc()}", flush=True)
    print(f"{len(checks) - failed} passed, {failed} failed")
    sys.exit(bool(failed))


if __name__ == "__main__":
    main()
