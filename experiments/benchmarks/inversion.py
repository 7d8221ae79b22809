"""The inversion beside a loop over cells, and how it grows with the number of cells."""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np
from scipy.ndimage import gaussian_filter
from threadpoolctl import threadpool_limits

from learnclosure.diagnosis.inversion import SmoothInversion
from learnclosure.diagnosis.tensor import (
    NormalEquations,
    least_squares_tensor,
    normal_equations,
)
from learnclosure.ensemble.grid import Geometry
from learnclosure.study import DiagnosisSettings

TENSOR = np.array([[1500.0, -400.0], [500.0, 700.0]])
TRACERS = 6


def seconds(work: Callable[[], object]) -> float:
    """Processor time of one call."""
    start = time.process_time()
    work()
    return time.process_time() - start


def case(rows: int, columns: int) -> tuple[Geometry, np.ndarray, np.ndarray, np.ndarray]:
    """Make a channel with an island, smooth random gradients and noisy fluxes."""
    random = np.random.default_rng(0)
    mask = np.ones((1, rows, columns), bool)
    mask[0, rows // 3 : rows // 2, columns // 4 : columns // 3] = False
    width = np.full((rows, columns), 30e3)
    geometry = Geometry(width, width, mask, True, False)
    slope = np.stack(
        [
            [gaussian_filter(random.normal(size=mask.shape[1:]), 3.0)[None] for _ in range(2)]
            for _ in range(TRACERS)
        ]
    )
    flux = -np.einsum("ab,kblyx->kalyx", TENSOR, slope)
    flux += 800.0 * slope.std() * random.normal(size=flux.shape)
    return geometry, np.where(mask, geometry.area, 0.0), flux, slope


def loop(flux: np.ndarray, slope: np.ndarray, wet: np.ndarray) -> None:
    """Solve every cell with NumPy's least squares, one after another."""
    for layer, row, column in zip(*np.nonzero(wet), strict=True):
        place = (slice(None), slice(None), layer, row, column)
        np.linalg.lstsq(slope[place], -flux[place], rcond=None)


def least_squares(flux: np.ndarray, slope: np.ndarray, area: np.ndarray) -> None:
    """Solve all cells at once."""
    least_squares_tensor(normal_equations(flux, slope, area))


def smooth(
    geometry: Geometry, area: np.ndarray, equations: NormalEquations, **options: object
) -> Callable[[], object]:
    """Set the smooth inversion up."""
    inversion = SmoothInversion(geometry, area, DiagnosisSettings(**options), TRACERS)
    return lambda: inversion.fit(equations)


def main() -> None:
    """Print the ratios."""
    geometry, area, flux, slope = case(128, 256)
    one = seconds(lambda: loop(flux, slope, geometry.mask))
    other = min(seconds(lambda: least_squares(flux, slope, area)) for _ in range(5))
    print(f"least squares, loop over cells / all at once: {one / other:.0f}")
    per_cell = []
    for rows, columns in ((320, 320), (1000, 1000)):
        geometry, area, flux, slope = case(rows, columns)
        equations = normal_equations(flux, slope, area)
        cells = int(geometry.mask.sum())
        plain = seconds(smooth(geometry, area, equations, floor_method="projection"))
        # A floor this high holds eigenvalues up in about a third of the cells.
        bounded = seconds(smooth(geometry, area, equations, floor_method="admm", floor=680.0))
        per_cell.append((plain / cells, bounded / cells))
        print(
            f"smooth inversion, {cells:.2g} cells: {1e6 * plain / cells:.1f} us a cell with "
            f"projection, {1e6 * bounded / cells:.0f} us with the floor kept in the fit"
        )
    growth = [large / small for small, large in zip(*per_cell, strict=True)]
    print(f"growth a cell from 1e5 to 1e6 cells: {growth[0]:.2f} and {growth[1]:.2f}")


if __name__ == "__main__":
    with threadpool_limits(1):
        main()
