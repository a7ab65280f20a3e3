"""Compares our morphology with scipy.ndimage on random maps and tips, bit for bit.

    cargo build --release --no-default-features --example morphology_cli
    python tests/scipy_compare.py [--cases N] [--seed S] [--write-golden]

Needs numpy and scipy. Exits with 1 on the first difference. With --write-golden it also writes
the small cases in tests/golden that a machine without Python checks (tests/morphology_golden.rs).

Conventions. Ours: I(x) = max S(x + u) + p(u), R(s) = min I(s - u) - p(u), apex in the centre.
SciPy: grey_dilation takes f(x - y) + b(y), grey_erosion f(x + y) - b(y); both therefore get the
mirrored tip. Outside the map: cval = -inf for the dilation, +inf for the erosion. Voids likewise.
SciPy adds in double precision and rounds at the end; rounding is monotonic and the double sum of
two single precision numbers of like size is exact, so the bits agree.
"""

import argparse
import pathlib
import subprocess
import sys
import tempfile

import numpy as np
from scipy import ndimage

ROOT = pathlib.Path(__file__).resolve().parent.parent
GOLDEN = ROOT / "tests" / "golden"


def program():
    found = sorted((ROOT / "target" / "release" / "examples").glob("morphology_cli*"))
    found = [p for p in found if p.stem == "morphology_cli" and p.suffix in ("", ".exe")]
    if not found:
        sys.exit("build the example morphology_cli first (see --help)")
    return found[0]


def theirs(operation, surface, tip):
    """What scipy.ndimage gives, voids (NaN) constraining nothing."""
    inside = np.isfinite(tip)
    mirrored = np.where(inside, tip, 0)[::-1, ::-1]
    footprint = inside[::-1, ::-1]
    if operation == "open":
        return theirs("dilate", theirs("erode", surface, tip), tip)
    function, outside = {
        "dilate": (ndimage.grey_dilation, -np.inf),
        "erode": (ndimage.grey_erosion, np.inf),
    }[operation]
    seen = np.where(np.isnan(surface), outside, surface).astype(np.float32)
    out = function(
        seen, footprint=footprint, structure=mirrored, mode="constant", cval=outside
    )
    return np.where(np.isinf(out), np.nan, out + np.float32(0)).astype(np.float32)


def ours(operation, surface, tip, folder):
    paths = [folder / name for name in ("map.npy", "tip.npy", "out.npy")]
    np.save(paths[0], np.ascontiguousarray(surface, np.float32))
    np.save(paths[1], np.ascontiguousarray(tip, np.float32))
    subprocess.run(
        [program(), operation, *map(str, paths)], check=True, stdout=subprocess.DEVNULL
    )
    return np.load(paths[2])


def scene(random):
    """A map and a tip without any symmetry."""
    rows, columns = random.integers(1, 70, 2)
    half = random.integers(0, 12, 2)
    surface = random.normal(0, random.choice([0.3, 3.0, 1e4]), (rows, columns))
    surface += 40 * ((np.arange(columns) // 11) % 2)
    if random.random() < 0.4:
        surface[random.random((rows, columns)) < 0.1] = np.nan
    y, x = np.mgrid[-half[0] : half[0] + 1, -half[1] : half[1] + 1]
    tip = -(random.uniform(0, 0.6) * (x**2 + 0.5 * y**2) + random.uniform(0, 2) * np.maximum(x, 0))
    tip += -random.uniform(0, 1, tip.shape) * random.choice([0, 1])
    if random.random() < 0.4:
        tip[random.random(tip.shape) < 0.2] = -np.inf
    tip[half[0], half[1]] = 0
    return surface.astype(np.float32), tip.astype(np.float32)


def same(a, b):
    return a.shape == b.shape and np.array_equal(a, b, equal_nan=True)


def check(surface, tip, folder):
    for operation in ("dilate", "erode", "open"):
        mine, reference = ours(operation, surface, tip, folder), theirs(operation, surface, tip)
        if not same(mine, reference):
            where = np.argwhere(~((mine == reference) | (np.isnan(mine) & np.isnan(reference))))
            sys.exit(
                f"{operation} of {surface.shape} by {tip.shape} differs at {where[:5].tolist()}: "
                f"{mine[tuple(where[0])]} is not {reference[tuple(where[0])]}"
            )
    # SciPy's own opening knows only one border value for both halves: compare away from it.
    if np.isfinite(surface).all() and np.isfinite(tip).all():
        half = (tip.shape[0] - 1, tip.shape[1] - 1)
        inner = tuple(slice(h, n - h) for h, n in zip(half, surface.shape) if n > 2 * h)
        if len(inner) == 2:
            opened = ndimage.grey_opening(surface, structure=tip[::-1, ::-1], mode="nearest")
            if not same(ours("open", surface, tip, folder)[inner], opened[inner] + np.float32(0)):
                sys.exit(f"grey_opening of {surface.shape} by {tip.shape} differs")


def write_golden():
    GOLDEN.mkdir(parents=True, exist_ok=True)
    random = np.random.default_rng(20)
    wanted = {"plain": (False, False), "voids": (True, False), "holes": (False, True)}
    while wanted:
        surface, tip = scene(random)
        kind = (not np.isfinite(surface).all(), not np.isfinite(tip).all())
        name = next((n for n, k in wanted.items() if k == kind), None)
        if name is None or min(surface.shape) < 20 or min(tip.shape) < 5 or max(tip.shape) > 15:
            continue
        del wanted[name]
        np.save(GOLDEN / f"{name}-map.npy", surface)
        np.save(GOLDEN / f"{name}-tip.npy", tip)
        for operation in ("dilate", "erode", "open"):
            np.save(GOLDEN / f"{name}-{operation}.npy", theirs(operation, surface, tip))


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--cases", type=int, default=60)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--write-golden", action="store_true")
    options = parser.parse_args()
    if options.write_golden:
        write_golden()
    random = np.random.default_rng(options.seed)
    with tempfile.TemporaryDirectory() as folder:
        for _ in range(options.cases):
            check(*scene(random), pathlib.Path(folder))
    print(f"{options.cases} cases, bit for bit as scipy.ndimage")


if __name__ == "__main__":
    main()
