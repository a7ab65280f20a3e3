"""Golden values by NumPy, SciPy and scikit-image for our own numbers, in tests/golden.

    python tests/python_golden.py            writes them
    python tests/python_golden.py --check    makes them anew and compares; what cannot be imported
                                             is skipped with a line that says so

- segments-{map,labels}.npy: an invented map of caps, some touching; threshold, components of eight
  neighbours, watershed of the map after a 3 x 3 mean from one marker per cap
  (skimage.segmentation.watershed), and with areas and equivalent diameters in
  segments-regions.npy (skimage.measure.regionprops): label, area, diameter.
  Tested in src/dimensions/segmentation.rs.
- lstsq-{rows,coefficients}.npy: a plane and a bivariate cubic by numpy.linalg.lstsq; each row holds
  the ten terms and the height. Tested in src/leveling/least_squares/tests.rs.
- coverage.npy: coverage, degrees of freedom (infinite: normal), two-sided factor by scipy.stats.
  Tested in src/uncertainty/budget.rs.
- filter-{map,mean}.npy: see filter_golden.py.
"""

import argparse
import pathlib
import sys

import numpy as np

GOLDEN = pathlib.Path(__file__).resolve().parent / "golden"
THRESHOLD = 1.0


def segments():
    from scipy import ndimage
    from skimage import measure, segmentation

    random = np.random.default_rng(35)
    rows, columns = 120, 160
    y, x = np.mgrid[:rows, :columns].astype(float)
    # Centres and radii; 1-2, 3-4 and 5-6-7 touch.
    caps = [
        (20, 22, 9), (22, 36, 8), (60, 30, 11), (76, 36, 9), (95, 90, 8), (96, 103, 9),
        (106, 97, 7), (25, 80, 10), (30, 120, 12), (70, 75, 7), (65, 130, 9), (98, 20, 6),
        (50, 100, 5), (104, 140, 10),
    ]  # fmt: skip
    surface = np.zeros((rows, columns))
    for r, c, radius in caps:
        d2 = (y - r - 0.3) ** 2 + (x - c + 0.2) ** 2
        surface = np.maximum(surface, radius * (1 - d2 / radius**2))
    surface = (surface + random.normal(0, 0.02, surface.shape)).astype(np.float32)
    smooth = ndimage.uniform_filter(surface.astype(np.float64), 3)
    markers = np.zeros(surface.shape, np.int32)
    for number, (r, c, _) in enumerate(caps, 1):
        markers[r, c] = number
    labels = segmentation.watershed(
        -smooth, markers, mask=surface > THRESHOLD, connectivity=2
    ).astype(np.int32)
    regions = [
        (p.label, p.area, p.equivalent_diameter_area) for p in measure.regionprops(labels)
    ]
    return {
        "segments-map": surface,
        "segments-labels": labels,
        "segments-regions": np.array(regions, float),
    }


def lstsq():
    random = np.random.default_rng(36)
    x, y = random.uniform(-1, 1, (2, 400))
    terms = [x**i * y**j for i in range(4) for j in range(4 - i)]
    design = np.stack(terms, axis=1)
    heights = design @ random.normal(0, 5, 10) + random.normal(0, 0.3, 400)
    cubic = np.linalg.lstsq(design, heights, rcond=None)[0]
    # Terms in the order 1, y, y^2, y^3, x, ...: the plane has 0, 1 and 4.
    plane = np.zeros(10)
    plane[[0, 1, 4]] = np.linalg.lstsq(design[:, [0, 1, 4]], heights, rcond=None)[0]
    return {
        "lstsq-rows": np.column_stack([design, heights]),
        "lstsq-coefficients": np.stack([plane, cubic]),
    }


def coverage():
    from scipy import stats

    table = []
    for p in (0.6827, 0.90, 0.95, 0.9545, 0.99, 0.9973):
        for freedom in (1, 2, 3, 4, 7, 16, 50, 300, np.inf):
            distribution = stats.norm() if np.isinf(freedom) else stats.t(freedom)
            table.append((p, freedom, distribution.ppf(0.5 + p / 2)))
    return {"coverage": np.array(table)}


def mean_surface():
    import filter_golden

    return filter_golden.made()


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--check", action="store_true")
    check = parser.parse_args().check
    different = []
    for make in (segments, lstsq, coverage, mean_surface):
        try:
            made = make()
        except ImportError as error:
            if not check:
                raise
            print(f"{make.__name__}: skipped, {error}; the committed values stand")
            continue
        for name, value in made.items():
            path = GOLDEN / f"{name}.npy"
            if not check:
                np.save(path, value)
                continue
            kept = np.load(path)
            same = kept.shape == value.shape and np.allclose(
                kept, value, rtol=1e-6, atol=1e-6, equal_nan=True
            )
            if not same:
                different.append(name)
        print(f"{make.__name__}: {'checked' if check else 'written'}")
    if different:
        sys.exit("differs from the committed values: " + ", ".join(different))


if __name__ == "__main__":
    main()
