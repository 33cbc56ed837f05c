"""The same job in NumPy and SciPy, vectorised as its users would write it: the yardstick of ratios.py.

    python3 peer.py job FIELD.npz OUT.npz      screen, divergence, fit with a body, stagnation points, level lines
    python3 peer.py cosine FIELD.npz OUT.npz   edge fluxes and the DCT-I solve of a full rectangle

Same mathematics as isopsi: fourth-order edge fluxes, half weights on rims, weighted least squares for psi.  The points come from
Newton steps on bicubic splines, the lines from contourpy when it is installed (else they are skipped, in favor of this script).
"""
import sys

import numpy as np


def edge_fluxes(f, ok, h, axis):
    """Flux along every edge between two valid nodes; NaN where there is none."""
    f, ok = np.moveaxis(f, axis, 0), np.moveaxis(ok, axis, 0)
    f = np.where(ok, f, 0.0)
    edge = ok[:-1] & ok[1:]
    before = np.zeros_like(edge)
    before[1:] = ok[:-2]
    after = np.zeros_like(edge)
    after[:-1] = ok[2:]
    fm = np.zeros_like(f[:-1])
    fm[1:] = f[:-2]
    fp = np.zeros_like(fm)
    fp[:-1] = f[2:]
    a, b = f[:-1], f[1:]
    q = np.where(before & after, h / 24 * (-fm + 13 * a + 13 * b - fp),
                 np.where(after, h / 12 * (5 * a + 8 * b - fp),
                          np.where(before, h / 12 * (5 * b + 8 * a - fm), h / 2 * (a + b))))
    return np.moveaxis(np.where(edge, q, np.nan), 0, axis)


def rim_weights(ok):
    cell = np.pad(ok[:-1, :-1] & ok[1:, :-1] & ok[:-1, 1:] & ok[1:, 1:], 1).astype(float)
    wy = 0.5 * (cell[1:-1, :-1] + cell[1:-1, 1:])
    wx = 0.5 * (cell[:-1, 1:-1] + cell[1:, 1:-1])
    return np.where(wy == 0, 0.25, wy), np.where(wx == 0, 0.25, wx)


def median_screen(u, v, ok, epsilon, limit=2.0):
    """Normalized median test on both components (Westerweel & Scarano 2005)."""
    bad = np.zeros_like(ok)
    for f in (u, v):
        p = np.pad(np.where(ok, f, np.nan), 1, constant_values=np.nan)
        n = np.stack([p[1 + a:p.shape[0] - 1 + a, 1 + b:p.shape[1] - 1 + b]
                      for a in (-1, 0, 1) for b in (-1, 0, 1) if a or b])
        with np.errstate(all="ignore"):
            med = np.nanmedian(n, axis=0)
            spread = np.nanmedian(np.abs(n - med), axis=0)
            bad |= np.abs(f - med) / (spread + epsilon) > limit
    return ok & ~bad


def job(path, out):
    import scipy.sparse as sp
    import scipy.sparse.linalg as sl
    from scipy.interpolate import RectBivariateSpline
    with np.load(path) as z:
        u, v, x, y = (z[k].astype(float) for k in ("u", "v", "x", "y"))
    h = x[1] - x[0]
    ok = np.isfinite(u) & np.isfinite(v)
    ok = median_screen(u, v, ok, 0.1 * np.nanstd(u))
    div = np.full(u.shape, np.nan)
    uu, vv = np.where(ok, u, np.nan), np.where(ok, v, np.nan)
    div[1:-1, 1:-1] = (uu[1:-1, 2:] - uu[1:-1, :-2] + vv[2:, 1:-1] - vv[:-2, 1:-1]) / (2 * h)
    qy, qx = edge_fluxes(u, ok, h, 0), -edge_fluxes(v, ok, h, 1)
    wy, wx = rim_weights(ok)
    ids = np.arange(u.size).reshape(u.shape)
    ey, ex = np.isfinite(qy), np.isfinite(qx)
    a = np.r_[ids[:-1][ey], ids[:, :-1][ex]]
    b = np.r_[ids[1:][ey], ids[:, 1:][ex]]
    q = np.r_[qy[ey], qx[ex]]
    w = np.r_[wy[ey], wx[ex]]
    n = u.size
    diagonal = np.bincount(a, w, n) + np.bincount(b, w, n)
    laplace = sp.coo_matrix((np.r_[-w, -w, diagonal], (np.r_[a, b, np.arange(n)], np.r_[b, a, np.arange(n)])), (n, n)).tocsc()
    rhs = np.bincount(b, w * q, n) - np.bincount(a, w * q, n)
    free = np.flatnonzero(diagonal > 0)[1:]
    psi = np.full(n, np.nan)
    psi[diagonal > 0] = 0
    lu = sl.splu(laplace[free][:, free], permc_spec="MMD_AT_PLUS_A", options=dict(SymmetricMode=True), diag_pivot_thresh=0.0)
    psi[free] = lu.solve(rhs[free])
    psi = psi.reshape(u.shape) - np.nanmean(psi)
    boxes = {}
    outflow = np.diff(qy, axis=1) - np.diff(qx, axis=0)
    for m in (1, 2, 4, 8, 16, 32):
        ny, nx = outflow.shape[0] // m * m, outflow.shape[1] // m * m
        boxes[m] = outflow[:ny, :nx].reshape(ny // m, m, nx // m, m).sum((1, 3))
    filled = np.where(np.isfinite(psi), psi, 0.0)
    spline = RectBivariateSpline(y, x, filled, kx=3, ky=3, s=0)
    px, py = spline(y, x, dy=1), spline(y, x, dx=1)
    change = np.ones((u.shape[0] - 1, u.shape[1] - 1), bool)
    for g in (px, py):
        corners = np.stack([g[:-1, :-1], g[1:, :-1], g[:-1, 1:], g[1:, 1:]])
        change &= (corners.min(0) <= 0) & (corners.max(0) >= 0)
    cell = ok[:-1, :-1] & ok[1:, :-1] & ok[:-1, 1:] & ok[1:, 1:]
    jj, ii = np.nonzero(change & cell)
    ty, tx = y[jj] + h / 2, x[ii] + h / 2
    for _ in range(12):
        gx, gy = spline.ev(ty, tx, dy=1), spline.ev(ty, tx, dx=1)
        xx, yy, xy = spline.ev(ty, tx, dy=2), spline.ev(ty, tx, dx=2), spline.ev(ty, tx, dx=1, dy=1)
        det = xx * yy - xy * xy
        det[det == 0] = 1e-300
        tx = np.clip(tx - np.clip((yy * gx - xy * gy) / det, -h, h), x[0], x[-1])
        ty = np.clip(ty - np.clip((xx * gy - xy * gx) / det, -h, h), y[0], y[-1])
    keep = (np.abs(tx - x[ii] - h / 2) < h) & (np.abs(ty - y[jj] - h / 2) < h)
    points = np.c_[tx[keep], ty[keep], det[keep]]
    lines = []
    try:
        import contourpy
        generator = contourpy.contour_generator(x, y, np.ma.masked_invalid(psi))
        for level in np.linspace(np.nanmin(psi), np.nanmax(psi), 22)[1:-1]:
            lines += generator.lines(level)
    except ImportError:
        pass
    vertices = np.concatenate(lines) if lines else np.zeros((0, 2))
    np.savez(out, psi=psi, div=div, points=points, vertices=vertices, **{f"box{m}": o for m, o in boxes.items()})


def cosine(path, out):
    from scipy.fft import dctn, idctn
    with np.load(path) as z:
        u, v, x, y = (z[k].astype(float) for k in ("u", "v", "x", "y"))
    dx, dy = x[1] - x[0], y[1] - y[0]
    ok = np.ones(u.shape, bool)
    qy, qx = edge_fluxes(u, ok, dy, 0), -edge_fluxes(v, ok, dx, 1)
    wy, wx = np.full(qy.shape, dx / dy), np.full(qx.shape, dy / dx)
    wy[:, [0, -1]] *= 0.5
    wx[[0, -1]] *= 0.5
    rhs = np.zeros(u.shape)
    rhs[1:] += wy * qy
    rhs[:-1] -= wy * qy
    rhs[:, 1:] += wx * qx
    rhs[:, :-1] -= wx * qx
    mass = np.ones(u.shape)
    mass[[0, -1]] *= 0.5
    mass[:, [0, -1]] *= 0.5
    ny, nx = u.shape
    lam = dx / dy * (2 - 2 * np.cos(np.pi * np.arange(ny) / (ny - 1)))[:, None] \
        + dy / dx * (2 - 2 * np.cos(np.pi * np.arange(nx) / (nx - 1)))[None]
    lam[0, 0] = 1
    hat = dctn(rhs / mass, type=1, workers=2) / lam
    hat[0, 0] = 0
    psi = idctn(hat, type=1, workers=2)
    np.savez(out, psi=psi - psi.mean())


if __name__ == "__main__":
    {"job": job, "cosine": cosine}[sys.argv[1]](sys.argv[2], sys.argv[3])
