"""Makes the demo data of isopsi: two invented experiments with known truth.

Nothing here was measured.  The flows are closed forms that satisfy u = dpsi/dy, v = -dpsi/dx exactly; noise, bad vectors
and gaps are added with a fixed seed.  Run `python3 data-demo/generate.py` (needs numpy and h5py) to write the files again.
"""
import pathlib

import h5py
import numpy as np

HERE = pathlib.Path(__file__).parent


def correlated(rng, shape, overlap):
    """Unit noise as overlapping top-hat windows leave it: correlation max(0, 1 - k (1 - overlap)) along both axes."""
    def factor(n):
        k = np.abs(np.arange(n)[:, None] - np.arange(n)[None])
        return np.linalg.cholesky(np.maximum(0, 1 - k * (1 - overlap)) + 1e-12 * np.eye(n))
    return factor(shape[0]) @ rng.standard_normal(shape) @ factor(shape[1]).T


# --- 1. A recirculating aquarium flume with a half-round sill on its floor -------------------------------------------
SPEED, SILL, LAYER = 60.0, 24.0, 14.0           # mm/s far above the floor, mm radius of the sill, mm boundary layer
BUBBLE_X, BUBBLE_A, BUBBLE_B, DEPTH = 78.0, 46.0, 26.0, 1.9


def flume_psi(x, y):
    """psi = U D tanh(D / L) F, with D = 0 on floor and sill; F < 0 inside the recirculation bubble behind the sill."""
    r2 = np.maximum(x * x + y * y, 1e-9)
    d = y * (1 - SILL**2 / r2)
    f = 1 - DEPTH * np.exp(-((x - BUBBLE_X) / BUBBLE_A) ** 2 - (y / BUBBLE_B) ** 2)
    return SPEED * d * np.tanh(d / LAYER) * f


def flume_velocity(x, y):
    """Velocity by complex-step differentiation: exact to rounding."""
    step = 1e-30
    def psi(x, y):
        r2 = x * x + y * y
        d = y * (1 - SILL**2 / r2)
        f = 1 - DEPTH * np.exp(-((x - BUBBLE_X) / BUBBLE_A) ** 2 - (y / BUBBLE_B) ** 2)
        return SPEED * d * np.tanh(d / LAYER) * f
    u = np.imag(psi(x + 0j, y + 1j * step)) / step
    v = -np.imag(psi(x + 1j * step, y + 0j)) / step
    return u, v


def flume():
    rng = np.random.default_rng(20261201)
    x1 = -66.0 + 3.0 * np.arange(101)
    y1 = 1.5 + 3.0 * np.arange(38)
    x, y = np.meshgrid(x1, y1)
    u, v = flume_velocity(x, y)
    sigma = 0.8
    u = u + sigma * correlated(rng, x.shape, 0.5)
    v = v + sigma * correlated(rng, x.shape, 0.5)
    solid = x * x + y * y <= SILL**2
    shadow = (np.abs(x - 20 - 0.55 * (y - 60)) < 5) & (y > 60)         # a light sheet shadow: no vectors there
    bad = (rng.random(x.shape) < 0.015) & ~solid & ~shadow             # wrong correlation peaks
    u[bad] = rng.uniform(-120, 120, bad.sum())
    v[bad] = rng.uniform(-120, 120, bad.sum())

    def rows(v_sign):
        lines = ["# invented demo data: recirculating flume with a half-round sill, not a measurement",
                 "x [mm],y [mm],u [mm/s],v [mm/s]"]
        for j, yy in enumerate(y1):
            for i, xx in enumerate(x1):
                if solid[j, i] or shadow[j, i]:
                    lines.append(f"{xx:.1f},{yy:.1f},,")
                else:
                    lines.append(f"{xx:.1f},{yy:.1f},{u[j, i]:.3f},{v_sign * v[j, i]:.3f}")
        return "\n".join(lines) + "\n"

    (HERE / "flume.csv").write_text(rows(1))
    (HERE / "flume_v_flipped.csv").write_text(rows(-1))
    half = BUBBLE_A * np.sqrt(np.log(DEPTH))
    from_, to = BUBBLE_X - half, BUBBLE_X + half
    xs, ys = np.meshgrid(np.arange(40, 120, 0.05), np.arange(0.5, 40, 0.05))
    p = flume_psi(xs, ys)
    k = np.argmin(p)
    return [("flume", "separation x on the floor", f"{from_:.3f}", "mm"),
            ("flume", "attachment x on the floor", f"{to:.3f}", "mm"),
            ("flume", "recirculation length", f"{to - from_:.3f}", "mm"),
            ("flume", "center x", f"{xs.flat[k]:.2f}", "mm"), ("flume", "center y", f"{ys.flat[k]:.2f}", "mm"),
            ("flume", "psi at center, floor = 0", f"{p.flat[k]:.3f}", "mm2 s-1"),
            ("flume", "psi at (150, 100), floor = 0", f"{flume_psi(150.0, 100.0):.3f}", "mm2 s-1"),
            ("flume", "sigma of u and v", f"{sigma}", "mm s-1"), ("flume", "overlap", "0.5", "1"),
            ("flume", "bad vectors planted", f"{bad.sum()}", "1")]


# --- 2. A stirred mixing tank with slippery walls, three frames -----------------------------------------------------
WIDTH, HEIGHT = 0.40, 0.30                      # m
STRENGTH = 2.4e-3                               # m2/s


def tank(t):
    """psi = S (sin 2p sin 2q + b(t) sin p sin q) with p = pi x / width, q = pi y / height: four cells, zero on the walls."""
    b = 0.60 + 0.10 * t
    x1 = np.linspace(0, WIDTH, 81)
    y1 = np.linspace(0, HEIGHT, 61)
    x, y = np.meshgrid(x1, y1)
    p, q = np.pi * x / WIDTH, np.pi * y / HEIGHT
    psi = STRENGTH * (np.sin(2 * p) * np.sin(2 * q) + b * np.sin(p) * np.sin(q))
    u = STRENGTH * np.pi / HEIGHT * (2 * np.sin(2 * p) * np.cos(2 * q) + b * np.sin(p) * np.cos(q))
    v = -STRENGTH * np.pi / WIDTH * (2 * np.cos(2 * p) * np.sin(2 * q) + b * np.cos(p) * np.sin(q))
    return x1, y1, psi, u, v


def mixing_tank():
    rng = np.random.default_rng(7)
    sigma = 6e-4
    frames = [tank(t) for t in range(3)]
    x1, y1 = frames[0][:2]
    shape = (len(frames), y1.size, x1.size)
    u, v = np.empty(shape), np.empty(shape)
    for k, (_, _, _, uu, vv) in enumerate(frames):
        u[k] = uu + sigma * rng.standard_normal(shape[1:])
        v[k] = vv + sigma * rng.standard_normal(shape[1:])
    hole = (np.abs(x1 - 0.31)[None] < 0.012) & (np.abs(y1 - 0.08)[:, None] < 0.012)     # a clamp hides the fluid
    u[:, hole] = np.nan
    v[:, hole] = np.nan
    with h5py.File(HERE / "mixing_tank.h5", "w") as f:
        f.attrs["comment"] = "invented demo data: stirred mixing tank, not a measurement"
        for name, values, unit in (("time", np.arange(3) * 0.5, "s"), ("y", y1, "m"), ("x", x1, "m")):
            f[name] = values
            f[name].attrs["units"] = unit
            f[name].make_scale(name)
        for name, values in (("u", u), ("v", v)):
            d = f.create_dataset(name, data=values.astype("f4"), compression="gzip", shuffle=True)
            d.attrs["units"] = "m s-1"
            for axis, scale in enumerate(("time", "y", "x")):
                d.dims[axis].attach_scale(f[scale])
    p, q = np.meshgrid(np.linspace(0, np.pi, 4001), np.linspace(0, np.pi / 2, 1501))     # the lower half holds one of each pair
    psi = STRENGTH * (np.sin(2 * p) * np.sin(2 * q) + 0.60 * np.sin(p) * np.sin(q))
    rows = []
    for name, k in (("maximum", np.argmax(psi)), ("minimum", np.argmin(psi))):
        rows += [("mixing_tank", f"lower psi {name}, walls = 0", f"{psi.flat[k]:.7f}", "m2 s-1"),
                 ("mixing_tank", f"x of the lower {name}", f"{p.flat[k] / np.pi * WIDTH:.4f}", "m"),
                 ("mixing_tank", f"y of the lower {name}", f"{q.flat[k] / np.pi * HEIGHT:.4f}", "m")]
    return rows + [("mixing_tank", "psi at the saddle", f"{0.60 * STRENGTH:.7f}", "m2 s-1"),
                   ("mixing_tank", "x of the saddle", f"{WIDTH / 2:.4f}", "m"),
                   ("mixing_tank", "y of the saddle", f"{HEIGHT / 2:.4f}", "m"),
                   ("mixing_tank", "y of the wall point on the left", f"{np.arccos(-0.15) / np.pi * HEIGHT:.4f}", "m"),
                   ("mixing_tank", "x of the wall point on the bottom", f"{np.arccos(-0.15) / np.pi * WIDTH:.4f}", "m"),
                   ("mixing_tank", "sigma of u and v", f"{sigma}", "m s-1"), ("mixing_tank", "overlap", "0", "1")]


def main():
    truth = flume() + mixing_tank()
    lines = ["# known truth of the invented demo data", "set,quantity,value,unit"]
    lines += [",".join(f'"{c}"' if "," in c else c for c in row) for row in truth]
    (HERE / "truth.csv").write_text("\n".join(lines) + "\n")


if __name__ == "__main__":
    main()
