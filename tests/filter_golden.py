"""Writes tests/golden/filter-{map,mean}.npy: a random map with voids and its Gaussian mean surface
by SciPy, against which src/dimensions/filter.rs is tested. Needs numpy and scipy.

Nesting index 9 nm, pitch 1 nm in x and 1.5 nm in y; sigma = alpha l / sqrt(2 pi). Voids by
normalised convolution: filtered values over filtered weights, zero outside the map.
"""

import pathlib

import numpy as np
from scipy import ndimage

GOLDEN = pathlib.Path(__file__).resolve().parent / "golden"
ALPHA = np.sqrt(np.log(2) / np.pi)


def made():
    random = np.random.default_rng(61)
    surface = random.normal(0, 3, (40, 60)) + 5
    surface[random.random(surface.shape) < 0.05] = np.nan
    surface[10:20, 30:38] = np.nan
    surface = surface.astype(np.float32)
    sigma = ALPHA * 9.0 / np.sqrt(2 * np.pi) / np.array([1.5, 1.0])
    known = np.isfinite(surface)
    smooth = lambda a: ndimage.gaussian_filter(
        a.astype(np.float64), sigma, mode="constant", cval=0.0, truncate=8.0
    )
    mean = smooth(np.where(known, surface, 0)) / smooth(known)
    mean[~known] = np.nan
    return {"filter-map": surface, "filter-mean": mean.astype(np.float32)}


def main():
    for name, values in made().items():
        np.save(GOLDEN / f"{name}.npy", values)


if __name__ == "__main__":
    main()
