"""Times our morphology against scipy.ndimage and DIPlib on the same arrays in the same run.

    pip install numpy scipy diplib
    cargo build --release --no-default-features --example morphology_cli
    python benches/compare.py [--rounds N] [--write]

Each round times every program once, in turn, so that a change in the machine's speed meets all of
them; the ratios are taken round by round and their median is given. Two clocks: the wall's, and the
processor time of all threads, which other work on the machine does not inflate so. Ours is timed
inside its own process, files excluded, as the median of some repeats (wall) and as the processor
time of many repeats less that of one (Unix only). --write keeps the table in
benches/results with the date and the machine.
"""

import argparse
import datetime
import importlib.metadata
import os
import pathlib
import platform
import resource
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
    """Wall and processor seconds, and the result."""
    wall, cpu = time.perf_counter(), time.process_time()
    out = run()
    return time.perf_counter() - wall, time.process_time() - cpu, out


def children():
    usage = resource.getrusage(resource.RUSAGE_CHILDREN)
    return usage.ru_utime + usage.ru_stime


def ours(operation, folder, repeats):
    """Median wall seconds and mean processor seconds."""
    files = [folder / n for n in ("map.npy", "tip.npy", "out.npy")]

    def run(count):
        before = children()
        done = subprocess.run(
            [PROGRAM, operation, *files, str(count)], check=True, capture_output=True, text=True
        )
        return children() - before, [float(line) for line in done.stdout.split()]

    once, _ = run(1)
    many, walls = run(repeats + 1)
    return statistics.median(walls), (many - once) / repeats


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
    """Medians in milliseconds and ratios to ours, as (wall, processor) for each program."""
    rows = []
    with tempfile.TemporaryDirectory() as folder:
        folder = pathlib.Path(folder)
        np.save(folder / "map.npy", surface)
        np.save(folder / "tip.npy", tip)
        general = scipy_run(operation, surface, tip)
        diplib = diplib_run(operation, surface, tip)
        for _ in range(rounds):
            mine = ours(operation, folder, 100)
            *theirs, out = timed(general)
            if not np.array_equal(np.load(folder / "out.npy"), out + np.float32(0)):
                sys.exit(f"{name}: results differ from SciPy's")
            separable = (np.nan, np.nan)
            if flat:
                separable = timed(scipy_flat(operation, surface, tip.shape[0]))[:2]
            dip.SetNumberOfThreads(1)
            one = timed(diplib)[:2]
            dip.SetNumberOfThreads(threads)
            many = timed(diplib)[:2]
            rows.append((mine, theirs, separable, one, many))
    rows = np.array(rows)
    return 1e3 * np.median(rows, axis=0), np.median(rows[:, 1:] / rows[:, :1], axis=0)


def copies(rounds):
    """4096 x 4096 with a 129 x 129 tip, in copies of the map into memory already in use."""
    surface, tip = lines(4096, 0.5), sphere_cone(129)
    target = np.empty_like(surface)
    rows = []
    with tempfile.TemporaryDirectory() as folder:
        folder = pathlib.Path(folder)
        np.save(folder / "map.npy", surface)
        np.save(folder / "tip.npy", tip)
        for _ in range(rounds):
            copy = [timed(lambda: np.copyto(target, surface))[:2] for _ in range(15)]
            rows.append((np.median(copy, axis=0), ours("dilate", folder, 5)))
    rows = np.array(rows)
    return 1e3 * np.median(rows, axis=0), np.median(rows[:, 1] / rows[:, 0], axis=0)


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
        f"# Comparison, {today}",
        "",
        f"{machine()}; {os.cpu_count()} cores; {platform.system()}; Python "
        f"{platform.python_version()}, NumPy {np.__version__}, SciPy {scipy.__version__}, "
        f"DIPlib {importlib.metadata.version('diplib')}. Load of the machine at the start: "
        f"{os.getloadavg()[0]:.1f}.",
        f"`python benches/compare.py --rounds {options.rounds}`: 512 x 512 pixels of 2 nm, tip "
        "65 x 65. Milliseconds as wall / processor time, medians; ratios are medians over rounds "
        "in which all ran in turn. Every result was checked to equal SciPy's bit for bit.",
        "",
        "| scene | operation | ours | SciPy, structure | SciPy, flat size | DIPlib, 1 thread "
        f"| DIPlib, {options.threads} threads |",
        "|" + "---|" * 7,
    ]
    ratios = [
        "",
        "Times as long as ours, wall / processor:",
        "",
        *[line.replace("| ours ", "") for line in text[-2:-1]],
        "|" + "---|" * 6,
    ]
    pair = lambda v, f: "" if np.isnan(v[0]) else f"{v[0]:{f}} / {v[1]:{f}}"
    for name, operation, surface, tip, flat in cases:
        ms, ratio = compare(name, operation, surface, tip, options.rounds, options.threads, flat)
        text.append("| " + " | ".join([name, operation, *(pair(v, ".2f") for v in ms)]) + " |")
        ratios.append("| " + " | ".join([name, operation, *(pair(v, ".0f") for v in ratio)]) + " |")
    ms, ratio = copies(options.rounds)
    text += ratios
    text += [
        "",
        f"4096 x 4096, tip 129 x 129, dilation: {pair(ms[1], '.0f')} ms; copying the map into "
        f"memory in use: {pair(ms[0], '.1f')} ms; {ratio[0]:.1f} copies by the wall.",
    ]
    print("\n".join(text))
    if options.write:
        folder = ROOT / "benches" / "results"
        folder.mkdir(exist_ok=True)
        (folder / f"{today}-comparison.md").write_text("\n".join(text) + "\n")


if __name__ == "__main__":
    main()
