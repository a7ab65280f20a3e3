"""Times our morphology against scipy.ndimage and DIPlib on the same arrays in the same run.

    pip install numpy scipy diplib
    cargo build --release --no-default-features --example morphology_cli
    python benches/compare.py [--rounds N] [--write]

Each round times every program once, in turn, so that a change in the machine's speed meets all of
them; the ratios are taken round by round and their median is given. Ours is timed inside its own
process, files excluded, as the median of some repeats. --write keeps the table in
benches/results with the date and the machine.
"""

import argparse
import datetime
import pathlib
import platform
import statistics
import subprocess
import sys
import tempfile
import time

import diplib as dip
import numpy as np
import scipy
from scipy import ndimage

ROOT = pathlib.Path(__file__).resolve().parent.parent
PROGRAM = ROOT / "target" / "release" / "examples" / "morphology_cli"
PITCH = 2.0


def lines(size, noise):
    """Lines 80 nm high, 100 nm wide, 200 nm apart, with white noise (nm)."""
    line = np.where((np.arange(size) * PITCH) % 200 < 100, 0.0, 80.0)
    random = np.random.default_rng(1)
    return (line + noise * random.normal(size=(size, size))).astype(np.float32)


def white(size):
    return np.random.default_rng(3).normal(size=(size, size)).astype(np.float32)


def sphere_cone(side):
    """A sphere of radius 10 nm on a cone of half-angle 17 degrees."""
    y, x = np.mgrid[-(side // 2) : side // 2 + 1, -(side // 2) : side // 2 + 1] * PITCH
    d, radius, angle = np.hypot(x, y), 10.0, np.radians(17.0)
    sphere = np.sqrt(np.maximum(radius**2 - d**2, 0)) - radius
    cone = (radius * (1 - np.sin(angle)) / np.cos(angle) - d) / np.tan(angle)
    return np.where(d <= radius * np.cos(angle), sphere, cone).astype(np.float32)


def random_tip(side):
    tip = -np.random.default_rng(4).random((side, side))
    tip[side // 2, side // 2] = 0
    return tip.astype(np.float32)


def timed(run):
    start = time.perf_counter()
    out = run()
    return time.perf_counter() - start, out


def ours(operation, folder, repeats, threads=None):
    environment = {"RAYON_NUM_THREADS": str(threads)} if threads else {}
    done = subprocess.run(
        [PROGRAM, operation, *(folder / n for n in ("map.npy", "tip.npy", "out.npy")), str(repeats)],
        check=True,
        capture_output=True,
        text=True,
        env={**__import__("os").environ, **environment},
    )
    return statistics.median(map(float, done.stdout.split()))


def scipy_run(operation, surface, tip):
    mirrored = tip[::-1, ::-1]
    if operation == "dilate":
        return lambda: ndimage.grey_dilation(
            surface, structure=mirrored, mode="constant", cval=-np.inf
        )
    return lambda: ndimage.grey_erosion(surface, structure=mirrored, mode="constant", cval=np.inf)


def scipy_flat(operation, surface, side):
    if operation == "dilate":
        return lambda: ndimage.grey_dilation(surface, size=side, mode="constant", cval=-np.inf)
    return lambda: ndimage.grey_erosion(surface, size=side, mode="constant", cval=np.inf)


def diplib_run(operation, surface, tip):
    function = dip.Dilation if operation == "dilate" else dip.Erosion
    image, element = dip.Image(surface), dip.SE(dip.Image(np.ascontiguousarray(tip)))
    return lambda: function(image, element)


def compare(name, operation, surface, tip, rounds, threads, flat=False):
    rows = []
    with tempfile.TemporaryDirectory() as folder:
        folder = pathlib.Path(folder)
        np.save(folder / "map.npy", surface)
        np.save(folder / "tip.npy", tip)
        general = scipy_run(operation, surface, tip)
        diplib = diplib_run(operation, surface, tip)
        for _ in range(rounds):
            mine = ours(operation, folder, 25)
            alone = ours(operation, folder, 25, threads=1)
            theirs, out = timed(general)
            if not np.array_equal(np.load(folder / "out.npy"), out + np.float32(0)):
                sys.exit(f"{name}: results differ from SciPy's")
            separable = (
                timed(scipy_flat(operation, surface, tip.shape[0]))[0] if flat else float("nan")
            )
            dip.SetNumberOfThreads(1)
            one, _ = timed(diplib)
            dip.SetNumberOfThreads(threads)
            many, _ = timed(diplib)
            rows.append((mine, alone, theirs, separable, one, many))
    columns = list(zip(*rows))
    mine = columns[0]
    ratio = lambda other: statistics.median(o / m for o, m in zip(other, mine))
    milliseconds = [1e3 * statistics.median(c) for c in columns]
    return name, operation, milliseconds, [ratio(columns[i]) for i in (2, 3, 4, 5)]


def copies(rounds):
    """4096 x 4096 with a 129 x 129 tip, in copies of the map into memory already in use."""
    surface, tip = lines(4096, 0.5), sphere_cone(129)
    target = np.empty_like(surface)
    pairs = []
    with tempfile.TemporaryDirectory() as folder:
        folder = pathlib.Path(folder)
        np.save(folder / "map.npy", surface)
        np.save(folder / "tip.npy", tip)
        for _ in range(rounds):
            copy = statistics.median(timed(lambda: np.copyto(target, surface))[0] for _ in range(9))
            pairs.append((copy, ours("dilate", folder, 5)))
    copy, mine = (1e3 * statistics.median(c) for c in zip(*pairs))
    return copy, mine, statistics.median(m / c for c, m in pairs)


def machine():
    try:
        text = pathlib.Path("/proc/cpuinfo").read_text()
        model = next(l.split(":")[1].strip() for l in text.splitlines() if "model name" in l)
        flags = next(l for l in text.splitlines() if l.startswith("flags"))
        model += ", AVX-512" if "avx512f" in flags else ", AVX2" if "avx2" in flags else ""
    except (OSError, StopIteration):
        model = platform.processor() or platform.machine()
    return model


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--threads", type=int, default=2)
    parser.add_argument("--write", action="store_true")
    options = parser.parse_args()
    cases = [
        ("lines, sphere-cone", "dilate", lines(512, 0.5), sphere_cone(65), False),
        ("lines, sphere-cone", "erode", lines(512, 0.5), sphere_cone(65), False),
        ("white noise, flat tip", "dilate", white(512), np.zeros((65, 65), np.float32), True),
        ("white noise, random tip", "dilate", white(512), random_tip(65), False),
    ]
    today = datetime.date.today().isoformat()
    text = [
        f"# {today}",
        "",
        f"{machine()}; {options.threads} threads; {platform.system()}; Python "
        f"{platform.python_version()}, NumPy {np.__version__}, SciPy {scipy.__version__}, "
        f"DIPlib {dip.__version__ if hasattr(dip, '__version__') else dip.libraryInformation.version}.",
        f"`python benches/compare.py --rounds {options.rounds}`. 512 x 512 pixels of 2 nm, tip 65 x 65; "
        "milliseconds are medians, ratios the medians over rounds in which all ran in turn. "
        "Results are checked to equal SciPy's bit for bit.",
        "",
        "| scene | operation | ours | ours, 1 thread | SciPy structure | SciPy size | DIPlib, 1 thread "
        f"| DIPlib, {options.threads} threads | x SciPy structure | x SciPy size | x DIPlib 1 | x DIPlib {options.threads} |",
        "|" + "---|" * 12,
    ]
    for name, operation, surface, tip, flat in cases:
        name, operation, ms, ratios = compare(
            name, operation, surface, tip, options.rounds, options.threads, flat
        )
        cell = lambda v, f: "" if v != v else format(v, f)
        row = [name, operation, *(cell(v, ".2f") for v in ms), *(cell(v, ".0f") for v in ratios)]
        text.append("| " + " | ".join(row) + " |")
        print(text[-1], flush=True)
    copy, mine, ratio = copies(options.rounds)
    text += [
        "",
        f"4096 x 4096, tip 129 x 129: {mine:.0f} ms, copying the map {copy:.1f} ms: {ratio:.1f} copies.",
    ]
    print("\n".join(text))
    if options.write:
        folder = ROOT / "benches" / "results"
        folder.mkdir(exist_ok=True)
        (folder / f"{today}-comparison.md").write_text("\n".join(text) + "\n")


if __name__ == "__main__":
    main()
