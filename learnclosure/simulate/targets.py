"""What the channel's tracers are drawn to: smooth waves of different directions and phases."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.simulate.regimes import ChannelRegime


@dataclass(frozen=True)
class Wave:
    """One plane-wave target ``cos(2 pi (m x / Lx + n y / Ly) + phase)``.

    Attributes
    ----------
    name : str
        Name of the tracer in the files.
    m, n : int
        Waves along the length and the width of the box.
    phase : float, radians
    withheld : bool
        True for a tracer kept to test a transport tensor, never to determine it.
    """

    name: str
    m: int
    n: int
    phase: float
    withheld: bool = False

    @property
    def role(self) -> str:
        """``inversion`` or ``withheld``."""
        return "withheld" if self.withheld else "inversion"

    @property
    def long_name(self) -> str:
        """What the tracer is, for the file's attribute."""
        return f"tracer drawn to a wave with {self.m} and {self.n} periods along x and y"


CHANNEL_WAVES: tuple[Wave, ...] = (
    Wave("tracer_1", 0, 1, 0.0),
    Wave("tracer_2", 0, 1, 0.5 * np.pi),
    Wave("tracer_3", 1, 0, 0.0),
    Wave("tracer_4", 2, 0, 1.0),
    Wave("tracer_5", 1, 1, 0.5),
    Wave("tracer_6", 1, -1, 2.0),
    Wave("withheld_1", 2, -1, 1.5, withheld=True),
    Wave("withheld_2", 1, 2, 0.8, withheld=True),
)
"""Six targets whose gradients span the plane everywhere, and two others to test with."""


def target_fields(
    regime: ChannelRegime, waves: tuple[Wave, ...] = CHANNEL_WAVES
) -> npt.NDArray[np.float64]:
    """Evaluate targets at the cell centres.

    Parameters
    ----------
    regime : ChannelRegime
    waves : tuple of Wave, optional

    Returns
    -------
    ndarray, shape (wave, y, x), 1
    """
    x = (np.arange(regime.columns) + 0.5) / regime.columns
    y = (np.arange(regime.rows) + 0.5) / regime.rows
    phases = [
        2 * np.pi * (wave.m * x[None, :] + wave.n * y[:, None]) + wave.phase for wave in waves
    ]
    return np.asarray(np.cos(phases), dtype=np.float64)
