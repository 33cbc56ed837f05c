"""Whole-process ratios of isopsi against peer.py, both run here and now, in turn: start-up, reading and writing included.

    python3 tests/bench/ratios.py target/release/isopsi [--quick]

Needs numpy, scipy, contourpy.  Prints medians of wall time, peak memory and their ratios; judges nothing.
"""
import os
import pathlib
import statistics
import subprocess
import sys
import tempfile
import time

import numpy as np

HERE = pathlib.Path(__file__).parent


def field(n, body, sigma=0.01, seed=1):
    """Twelve vortices in a stream past a round body, unit square, white noise."""
    rng = np.random.default_rng(seed)
    x = np.linspace(0, 1, n)
    gx, gy = np.meshgrid(x, x)
    u, v = np.ones_like(gx), np.zeros_like(gx)
    for _ in range(12):
        cx, cy, core, strength = *rng.random(2), rng.uniform(0.03, 0.08), rng.uniform(-0.4, 0.4)
        r2 = (gx - cx) ** 2 + (gy - cy) ** 2
        swirl = strength * -np.expm1(-r2 / core**2) / np.maximum(r2, 1e-12)
        u, v = u - swirl * (gy - cy), v + swirl * (gx - cx)
    u = u + sigma * rng.standard_normal(u.shape)
    v = v + sigma * rng.standard_normal(u.shape)
    if body:
        inside = np.hypot(gx - 0.5, gy - 0.5) < 0.12
        u[inside] = v[inside] = np.nan
    return dict(x=x, y=x, u=u, v=v)


def run(command):
    start = time.perf_counter()
    child = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
    message = child.stderr.read()
    _, status, usage = os.wait4(child.pid, 0)
    child.returncode = os.waitstatus_to_exitcode(status)
    if child.returncode:
        sys.exit(f"{command} failed: {message.decode()}")
    return time.perf_counter() - start, usage.ru_maxrss / 1024


def compare(title, ours, theirs, repeats):
    a, b = [], []
    for k in range(repeats + 1):
        pair = run(ours), run(theirs) if theirs else None
        if k:                                                   # the first round only warms the caches
            a.append(pair[0])
            if theirs:
                b.append(pair[1])
    wall, memory = statistics.median(t for t, _ in a), max(m for _, m in a)
    line = f"{title:44s} isopsi {wall:7.3f} s {memory:7.0f} MB"
    if theirs:
        other, much = statistics.median(t for t, _ in b), max(m for _, m in b)
        ratio = statistics.median(q[0] / p[0] for p, q in zip(a, b))
        line += f"   NumPy/SciPy {other:7.3f} s {much:7.0f} MB   ratio {ratio:5.1f}"
    print(line, flush=True)
    return wall, memory


def main():
    binary = sys.argv[1]
    repeats = 1 if "--quick" in sys.argv else 5
    python = sys.executable
    peer = str(HERE / "peer.py")
    with tempfile.TemporaryDirectory() as folder:
        folder = pathlib.Path(folder)
        out = str(folder / "out")
        for n, body in ((512, True), (1024, True), (2048, True), (512, False), (1024, False)):
            # In a process of its own: the peak memory of a child counts what its parent held when it started.
            subprocess.run([python, __file__, "--make", str(folder / f"{n}{'b' if body else 'r'}.npz"), str(n), str(int(body))], check=True)
        base = [binary, "streamlines", "--quiet", "--sigma", "0.01", "--overlap", "0", "--out", out + ".csv"]
        walls = []
        for n in (512, 1024, 2048):
            path = str(folder / f"{n}b.npz")
            theirs = [python, peer, "job", path, out + ".npz"] if n < 2048 else None
            wall, memory = compare(f"whole job, body, {n} x {n}", base + [path], theirs, repeats if n == 512 else min(repeats, 2))
            walls.append(wall)
            print(f"{'':44s} peak memory = {memory * 2**20 / (8 * n * n):.1f} f64 arrays of the grid")
        print(f"growth of the time: {walls[1] / walls[0]:.2f} and {walls[2] / walls[1]:.2f} a step of 4 in nodes")
        path = str(folder / "1024r.npz")
        compare("fit of a full rectangle, 1024 x 1024", [binary, "psi", "--quiet", "--no-screen", path, "--out", out + ".npz"],
                [python, peer, "cosine", path, out + ".npz"], repeats)


if __name__ == "__main__":
    if sys.argv[1] == "--make":
        np.savez(sys.argv[2], **field(int(sys.argv[3]), sys.argv[4] == "1"))
    else:
        main()
