"""The two-layer quasi-geostrophic channel as an object: state, inversion, steps and guards.

Equations (Pedlosky 1987, Geophysical Fluid Dynamics, section 6.16; from memory). With a
uniform background flow ``U_i`` along x in each layer, the potential vorticity
``q_i`` without its uniform gradient obeys ::

    dq_i/dt + div[(U_i + u_i) q_i] + v_i Q_i = sources,
    Q_1 = beta + F_1 (U_1 - U_2),   Q_2 = beta - F_2 (U_1 - U_2),
    q_1 = lap psi_1 - F_1 (psi_1 - psi_2),
    q_2 = lap psi_2 + F_2 (psi_1 - psi_2) + f h / H_2,   F_i = f^2 / (g' H_i),

in a doubly periodic box. Sources: the zonal-mean interface is drawn to the jet's,
``dq_i/dt = +-F_i (<psi_1 - psi_2> - target) / tau``, and the lower layer's vorticity
decays by bottom drag. The background flow is the mean of the jet over the box, which a
periodic streamfunction cannot carry; it is held fixed. Tracers are carried by the same
face velocities and drawn to their targets.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
import scipy.fft

from learnclosure.errors import SimulationError
from learnclosure.simulate import kernels
from learnclosure.simulate.kernels import HALO, Field, Spectrum
from learnclosure.simulate.regimes import DAY, ChannelRegime
from learnclosure.simulate.windows import WindowMeans, WindowSums

LARGEST_COURANT = 0.4
"""Largest ``(|u| + |v|) dt / dx`` the scheme is run with; it is stable up to 0.45."""

ADAMS_BASHFORTH = np.array(
    [[1.0, 0.0, 0.0], [1.5, -0.5, 0.0], [23 / 12, -16 / 12, 5 / 12]], np.float32
)
"""Weights of this, the last and the older increment in the first, second and later steps."""

Float64 = npt.NDArray[np.float64]
NOISE_WAVELENGTHS = (150.0e3, 600.0e3)


def ridge_height(regime: ChannelRegime) -> Float64:
    """Height of the ridge above the flat bottom.

    Parameters
    ----------
    regime : ChannelRegime

    Returns
    -------
    ndarray, shape (y, x), m
        A Gaussian section across a tilted crest, weaker away from mid-channel.
    """
    x = (np.arange(regime.columns) + 0.5) * regime.spacing
    y = (np.arange(regime.rows) + 0.5) * regime.spacing - 0.5 * regime.width
    crest = regime.ridge_position * regime.length + regime.ridge_tilt * y
    distance = x[None, :] - crest[:, None]
    distance -= regime.length * np.round(distance / regime.length)
    along = np.exp(-((y / (0.35 * regime.width)) ** 2))
    section = np.exp(-((distance / regime.ridge_width) ** 2))
    return np.asarray(regime.ridge_height * along[:, None] * section, dtype=np.float64)


def jet_velocity(regime: ChannelRegime) -> Float64:
    """Velocity along x the upper layer is drawn to, at the rows' centres.

    Parameters
    ----------
    regime : ChannelRegime

    Returns
    -------
    ndarray, shape (y,), m s-1
    """
    y = (np.arange(regime.rows) + 0.5) * regime.spacing - 0.5 * regime.width
    profile = regime.jet_speed * np.exp(-((y / regime.jet_width) ** 2))
    return np.asarray(profile + regime.background_speed, dtype=np.float64)


def uniform_gradients(regime: ChannelRegime) -> dict[str, Float64]:
    """Gradients along y of the background flow, which periodic fields leave out.

    Parameters
    ----------
    regime : ChannelRegime

    Returns
    -------
    dict of str to ndarray, shape (layer,)
        ``potential_vorticity`` in m-1 s-1 and ``thickness``, a pure number: the interface
        slopes by ``f (U_1 - U_2) / g'``.
    """
    shear = float(jet_velocity(regime).mean())
    upper, lower = regime.coupling
    slope = regime.coriolis_parameter * shear / regime.reduced_gravity
    return {
        "potential_vorticity": np.array([regime.beta + upper * shear, regime.beta - lower * shear]),
        "thickness": np.array([-slope, slope]),
    }


def _two_of(shape: tuple[int, ...]) -> tuple[Field, Field]:
    """Zeros for the increments of the last two steps."""
    return np.zeros(shape, np.float32), np.zeros(shape, np.float32)


class Channel:
    """All members of one channel, advanced together.

    Parameters
    ----------
    regime : ChannelRegime
    generators : sequence of numpy.random.Generator
        One a member; draws the noise the member starts with.

    Attributes
    ----------
    regime : ChannelRegime
    steps : int
        Steps taken.
    """

    def __init__(self, regime: ChannelRegime, generators: Sequence[np.random.Generator]) -> None:
        self.regime = regime
        self.steps = 0
        rows, columns = regime.rows, regime.columns
        members = len(generators)
        self._prepare_inversion()
        self._prepare_sources()
        padded, plain = (rows + 2 * HALO, columns + 2 * HALO), (rows, columns + 2 * HALO)
        self._vorticity = np.zeros((members, 2, *padded), np.float32)
        self._increments = _two_of((members, 2, *plain))
        self._tracers = np.zeros((members, 2, 0, *padded), np.float32)
        self._tracer_increments = _two_of((members, 2, 0, *plain))
        self._tracer_source = np.zeros((0, *plain), np.float32)
        self._tracer_start = 0
        self._window: WindowSums | None = None
        self._no_window = WindowSums(self._tracers.shape)
        for member, generator in enumerate(generators):
            self.vorticity[member] = self._starting_vorticity(generator)
        self._invert()

    @property
    def vorticity(self) -> Field:
        """Potential vorticity without its uniform gradient, (member, 2, y, x), s-1; a view."""
        return self._vorticity[..., HALO:-HALO, HALO:-HALO]

    @property
    def tracers(self) -> Field:
        """Tracers, shape (member, 2, tracer, y, x); a view."""
        return self._tracers[..., HALO:-HALO, HALO:-HALO]

    @property
    def corner_streamfunction(self) -> Field:
        """Streamfunction at north-east corners, shape (member, 2, y, x), m2 s-1."""
        return self._corner

    @property
    def days(self) -> float:
        """Time since the start, days."""
        return self.steps / self.regime.steps_per_day

    def _prepare_inversion(self) -> None:
        regime = self.regime
        across = 2 * np.pi * scipy.fft.rfftfreq(regime.columns, regime.spacing)[None, :]
        along = 2 * np.pi * scipy.fft.fftfreq(regime.rows, regime.spacing)[:, None]
        square = across**2 + along**2
        upper, lower = regime.coupling
        determinant = square * (square + upper + lower)
        # The mean of the streamfunction is free, and the shortest waves have no phase to
        # shift by half a cell: both are left out.
        kept = square > 0
        kept[regime.rows // 2, :] = False
        kept[:, regime.columns // 2] = False
        scale = np.where(kept, -1.0 / np.where(kept, determinant, 1.0), 0.0)
        inverse = [[square + lower, upper], [lower, square + upper]]
        self._inverse: Field = np.array(
            [[scale * entry for entry in line] for line in inverse], np.float32
        )
        half_cell = 0.5j * regime.spacing
        self._shift: Spectrum = np.exp(half_cell * (across + along)).astype(np.complex64)

    def _prepare_sources(self) -> None:
        regime = self.regime
        step = DAY / regime.steps_per_day
        jet = jet_velocity(regime)
        self._background: Field = np.array([jet.mean(), 0.0], np.float32)
        upper, lower = regime.coupling
        gradients = uniform_gradients(regime)["potential_vorticity"]
        relaxed = step / (regime.relaxation_days * DAY)
        drag = step / (regime.drag_days * DAY)
        # South-face Courant numbers come divided by 60, two of them make a mean: factor 30.
        self._coefficients: Field = np.array(
            [
                [gradients[0] * 30.0 * regime.spacing, upper * relaxed, 0.0, upper],
                [gradients[1] * 30.0 * regime.spacing, -lower * relaxed, drag, lower],
            ],
            np.float32,
        )
        self._courant = step / (60.0 * regime.spacing)
        self._tracer_decay = step / (regime.tracer_relaxation_days * DAY)
        corner_rows = -np.cumsum(jet - jet.mean()) * regime.spacing
        corner_rows -= corner_rows.mean()
        self._jet_streamfunction = corner_rows
        self._target: Field = (0.5 * (corner_rows + np.roll(corner_rows, 1))).astype(np.float32)
        slope = regime.coriolis_parameter / regime.lower_thickness
        self._ridge: Field = (slope * ridge_height(regime)).astype(np.float32)
        self._ridge_spectrum: Spectrum = scipy.fft.rfft2(self._ridge, workers=1)

    def _starting_vorticity(self, generator: np.random.Generator) -> Float64:
        """Potential vorticity of the jet plus smooth noise, the ridge's part included."""
        regime = self.regime
        shape = (regime.rows, regime.columns)
        across = scipy.fft.rfftfreq(regime.columns, regime.spacing)[None, :]
        along = scipy.fft.fftfreq(regime.rows, regime.spacing)[:, None]
        wavenumber = np.hypot(across, along)
        longest, shortest = 1 / NOISE_WAVELENGTHS[1], 1 / NOISE_WAVELENGTHS[0]
        band = (wavenumber >= longest) & (wavenumber <= shortest)
        square = (2 * np.pi * wavenumber) ** 2
        waves = [
            np.where(band, scipy.fft.rfft2(generator.standard_normal(shape), workers=1), 0.0)
            for _ in range(2)
        ]
        for spectrum in waves:
            speed = scipy.fft.irfft2(np.sqrt(square) * spectrum, s=shape, workers=1)
            scale = float(np.sqrt(np.mean(speed**2)))
            spectrum *= regime.noise_speed / scale if scale > 0 else 0.0
        centred = 0.5 * (self._jet_streamfunction + np.roll(self._jet_streamfunction, 1))
        waves[0] += scipy.fft.rfft2(np.repeat(centred[:, None], regime.columns, 1), workers=1)
        upper, lower = regime.coupling
        apart = waves[0] - waves[1]
        vorticity = [-square * waves[0] - upper * apart, -square * waves[1] + lower * apart]
        fields = [scipy.fft.irfft2(spectrum, s=shape, workers=1) for spectrum in vorticity]
        return np.stack([fields[0], fields[1] + self._ridge])

    def _invert(self) -> None:
        spectrum = scipy.fft.rfft2(self.vorticity, workers=1)
        kernels.invert_spectrum(spectrum, self._ridge_spectrum, self._inverse, self._shift)
        self._corner: Field = scipy.fft.irfft2(
            spectrum, s=self.vorticity.shape[-2:], workers=1, overwrite_x=True
        )

    def release_tracers(self, targets: Float64) -> None:
        """Start carrying tracers, each from the field it is drawn to.

        Parameters
        ----------
        targets : ndarray, shape (tracer, y, x)
            The same in both layers.
        """
        members, rows, columns = len(self._vorticity), self.regime.rows, self.regime.columns
        plain = (len(targets), rows, columns + 2 * HALO)
        padded = (len(targets), rows + 2 * HALO, columns + 2 * HALO)
        self._tracers = np.zeros((members, 2, *padded), np.float32)
        self._tracer_increments = _two_of((members, 2, *plain))
        self._tracer_source = np.zeros(plain, np.float32)
        self._tracer_source[..., HALO:-HALO] = self._tracer_decay * targets
        self.tracers[...] = targets
        self._tracer_start = self.steps

    def start_window(self) -> None:
        """Start summing velocities, tracers and tracer fluxes anew, for their time means."""
        self._window = WindowSums(self._tracers.shape)

    def window_means(self) -> WindowMeans:
        """Return time means over the steps since ``start_window``.

        Returns
        -------
        WindowMeans
        """
        assert self._window is not None
        return self._window.means(self.regime.spacing * self.regime.steps_per_day / DAY)

    def advance(self, steps: int) -> None:
        """Take time steps without any check.

        Parameters
        ----------
        steps : int
        """
        window = self._window or self._no_window
        for _ in range(steps):
            if self._window is not None:
                window.corner += self._corner
                window.vorticity += self.vorticity
                window.steps += 1
            age = min(self.steps, 2)
            tracer_age = min(self.steps - self._tracer_start, 2)
            kernels.advance_members(
                self._corner, self._vorticity, *self._increments, self._tracers,
                *self._tracer_increments, self._tracer_source, self._ridge, self._target,
                self._coefficients, self._background, self.regime.spacing, self._courant,
                self._tracer_decay, ADAMS_BASHFORTH[age], ADAMS_BASHFORTH[tracer_age],
                window.content, window.flux_x, window.flux_y,
            )  # fmt: skip
            self._increments = self._increments[1], self._increments[0]
            self._tracer_increments = self._tracer_increments[1], self._tracer_increments[0]
            self.steps += 1
            self._invert()

    def face_velocities(self, corner: Float64 | None = None) -> tuple[Float64, Float64]:
        """Velocities normal to the faces, background flow included.

        Parameters
        ----------
        corner : ndarray, optional, shape (member, 2, y, x), m2 s-1
            Streamfunction at north-east corners; that of now if not given.

        Returns
        -------
        west, south : ndarray, shape (member, 2, y, x), m s-1
            On the west and the south face of each cell.
        """
        chosen = self._corner.astype(np.float64) if corner is None else corner
        corner = chosen / self.regime.spacing
        drift = self._background.astype(np.float64)[:, None, None]
        east = drift - (corner - np.roll(corner, 1, axis=-2))
        north = corner - np.roll(corner, 1, axis=-1)
        return np.roll(east, 1, axis=-1), np.roll(north, 1, axis=-2)

    def centre_velocities(self, corner: Float64 | None = None) -> tuple[Float64, Float64]:
        """Velocities at cell centres, the mean of those on opposite faces.

        Parameters
        ----------
        corner : ndarray, optional, shape (member, 2, y, x), m2 s-1
            As for `face_velocities`.

        Returns
        -------
        u, v : ndarray, shape (member, 2, y, x), m s-1
        """
        west, south = self.face_velocities(corner)
        u = 0.5 * (west + np.roll(west, -1, axis=-1))
        v = 0.5 * (south + np.roll(south, -1, axis=-2))
        return u, v

    def layer_thicknesses(self, corner: Float64 | None = None) -> Float64:
        """Thickness of both layers at cell centres without its uniform gradient.

        The interface lies ``f (psi_1 - psi_2) / g'`` below its resting depth; the ridge
        stands in the lower layer.

        Parameters
        ----------
        corner : ndarray, optional, shape (member, 2, y, x), m2 s-1
            As for `face_velocities`.

        Returns
        -------
        ndarray, shape (member, 2, y, x), m
        """
        regime = self.regime
        chosen = self._corner.astype(np.float64) if corner is None else corner
        apart = chosen[:, 0] - chosen[:, 1]
        apart = 0.5 * (apart + np.roll(apart, 1, axis=-1))
        apart = 0.5 * (apart + np.roll(apart, 1, axis=-2))
        deeper = regime.coriolis_parameter / regime.reduced_gravity * apart
        upper, lower = regime.thicknesses
        return np.stack([upper + deeper, lower - deeper - ridge_height(regime)], axis=1)

    def courant_number(self) -> float:
        """Largest ``(|u| + |v|) dt / dx`` of all members; not a number once one blew up."""
        west, south = self.face_velocities()
        step = DAY / self.regime.steps_per_day
        return float((np.abs(west) + np.abs(south)).max() * step / self.regime.spacing)

    def check(self) -> None:
        """Refuse to go on with a flow the scheme cannot carry.

        Raises
        ------
        SimulationError
            If a value is not finite or the Courant number is above ``LARGEST_COURANT``.
        """
        day = f"{self.regime.name}: day {self.days:.4g}"
        remedy = f"use a time step shorter than {self.regime.time_step:g} s or a weaker jet"
        courant = self.courant_number()
        if not (np.isfinite(courant) and np.isfinite(self._tracers).all()):
            raise SimulationError(
                "the simulated flow blew up",
                where=day,
                found="values that are not finite",
                expected="finite values",
                remedy=remedy,
            )
        if courant > LARGEST_COURANT:
            raise SimulationError(
                "the simulated flow is too fast for its time step",
                where=day,
                found=f"Courant number (|u| + |v|) dt/dx = {courant:.3g}",
                expected=f"at most {LARGEST_COURANT}",
                remedy=remedy,
            )
