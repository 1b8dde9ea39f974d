"""Seeded synthetic terrains of any size, for benchmarks and for larger tests."""

from __future__ import annotations

import numpy as np


def rough(n: int, seed: int = 1, hurst: float = 0.8, relief_m: float = 500.0, longest: float = np.inf) -> np.ndarray:
    """Fractal terrain by spectral synthesis: power falling as wavenumber**-(2 hurst + 2).

    Parameters
    ----------
    n : int
        Rows and columns.
    seed : int
    hurst : float
        Hurst exponent of the surface; smaller is rougher.
    relief_m : float [m]
        Four standard deviations of the elevations.
    longest : float
        Wavelengths above so many cells are left out.

    Returns
    -------
    float32 array, shape (n, n) [m]
    """
    rng = np.random.default_rng(seed)
    spectrum = np.fft.rfft2(rng.standard_normal((n, n), np.float32))
    wavenumber = np.hypot(np.fft.fftfreq(n)[:, None], np.fft.rfftfreq(n)[None, :])
    wavenumber[0, 0] = np.inf
    spectrum *= np.where(wavenumber >= 1.0 / longest, wavenumber ** -(hurst + 1.0), 0.0)
    z = np.fft.irfft2(spectrum, s=(n, n)).astype(np.float32)
    z *= relief_m / (4.0 * z.std())
    return z - z.min()


def stationary(n: int, seed: int = 1) -> np.ndarray:
    """`rough` without wavelengths above 500 cells: depressions are alike however large the raster is."""
    return rough(n, seed, longest=500.0)


def smooth(n: int, seed: int = 1) -> np.ndarray:
    """`rough`, blurred by a Gaussian of 1.5 cells: no cell-size noise, wide depressions."""
    from scipy.ndimage import gaussian_filter

    return gaussian_filter(rough(n, seed), 1.5)


def river_like(n: int, seed: int = 1, cell_m: float = 10.0, noise_m: float = 0.15) -> np.ndarray:
    """Terrain whose slope falls with contributing area as area**-0.45 along a drainage network, plus noise.

    The network is that of a filled fractal, given a gentle tilt so that it drains to one side; elevations are
    then rebuilt from the outlets upstream with the slopes of the law. Nearest to nature of the three.

    Parameters
    ----------
    n : int
    seed : int
    cell_m : float [m]
    noise_m : float [m]
        Standard deviation of white noise on the elevations.

    Returns
    -------
    float32 array, shape (n, n) [m]
    """
    from basinwright.terrain import condition_and_route

    tilted = rough(n, seed) + np.linspace(2000.0, 0.0, n, dtype=np.float32)[:, None]
    size = np.full(n, cell_m)
    terrain = condition_and_route(tilted, size, size, size * size)
    slope = 1.5 * (terrain.area_m2 / cell_m**2).clip(1) ** -0.45
    z = _rebuild(terrain.directions, terrain.order, terrain.ncols, slope, cell_m)
    noise = np.random.default_rng(seed + 1).standard_normal((n, n), np.float32)
    return (terrain.grid(z) + noise_m * noise).astype(np.float32)


def quarried(n: int, seed: int = 1) -> np.ndarray:
    """`river_like` with a round quarry 30 m deep and 30 cells across on every four million cells: no cut leads out."""
    z = river_like(n, seed)
    rng = np.random.default_rng(seed + 2)
    row, col = np.mgrid[-15:16, -15:16]
    for r, c in rng.integers(200, n - 200, (max(1, n * n // 4_000_000), 2)):
        pit = z[r - 15 : r + 16, c - 15 : c + 16]
        pit -= 30.0 * (row * row + col * col < 225)
    return z


def noisy_plain(n: int, seed: int = 1) -> np.ndarray:
    """A plain that falls by 2 mm a cell under white noise of 0.1 m: every ninth cell lies below all its neighbours."""
    noise = np.random.default_rng(seed).standard_normal((n, n), np.float32)
    return 0.1 * noise + np.linspace(0.002 * n, 0.0, n, dtype=np.float32)[:, None]


def graded_roads(
    n: int, seed: int = 1, every: int = 250, grade_cells: float = 10.0
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Gentle `river_like` ground under a net of roads three cells wide, each graded by a Gaussian along it.

    Hillsides of up to 22 %; the fills over streams are some 5 m high, one in ten over 8 m.

    Parameters
    ----------
    n, seed : int
    every : int
        Cells from road to road, in both directions.
    grade_cells : float
        Standard deviation of the Gaussian.

    Returns
    -------
    elevation_m, area_cells : float arrays, shape (n, n)
        With roads; and what drains through each cell of the network that the ground was built from.
    road : bool array, shape (n, n)
    """
    from scipy.ndimage import gaussian_filter1d

    from basinwright.terrain import condition_and_route

    ground = river_like(n, seed, noise_m=0.0)
    size = np.full(n, 10.0)
    area = condition_and_route(ground, size, size, size * size).area_grid / 100.0
    z = 0.15 * ground + 0.1 * np.random.default_rng(seed + 1).standard_normal((n, n), np.float32)
    road = np.zeros((n, n), bool)
    for line in range(every // 2, n - 2, every):
        for across, mask in ((z, road), (z.T, road.T)):
            across[line - 1 : line + 2] = gaussian_filter1d(across[line], grade_cells)
            mask[line - 1 : line + 2] = True
    return z, area, road


def whole_metres(n: int, seed: int = 1) -> np.ndarray:
    """`rough` in whole metres: flats on every slope."""
    return np.rint(rough(n, seed))


def _rebuild(directions: np.ndarray, order: np.ndarray, ncols: int, slope: np.ndarray, cell_m: float) -> np.ndarray:
    """Elevations from the exits upstream: that of the next cell down plus slope times distance."""
    from numba import njit

    @njit
    def climb(directions, order, stride, slope, cell_m):  # type: ignore[no-untyped-def]
        offsets = (-stride, 1 - stride, 1, stride + 1, stride, stride - 1, -1, -stride - 1)
        z = np.zeros(directions.size, np.float64)
        for j in range(order.size - 1, -1, -1):
            c = order[j]
            code = directions[c]
            if code < 8:
                step = cell_m * (2.0**0.5 if code % 2 else 1.0)
                z[c] = z[c + offsets[code]] + slope[c] * step
        return z

    return climb(directions, order, ncols + 2, slope, cell_m)


TERRAINS = {
    "rough": rough,
    "smooth": smooth,
    "river-like": river_like,
    "whole-metre": whole_metres,
    "stationary": stationary,
    "quarried": quarried,
    "noisy plain": noisy_plain,
}
