"""Flows whose tracer problem is solved here, and whose tensor is known in closed form.

Tracers are ``G . x + c'``; the mean flux ``<u' c'> - kappa G`` of at least two of them and their
gradients go through the inversion.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.sparse import diags_array, identity, kron
from scipy.sparse.linalg import splu

from diagnosis_cases import GRADIENTS, box, uniform_eddies
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.tensor import least_squares_tensor, normal_equations
from learnclosure.simulate.exact import exact_plane_wave_tensor
from learnclosure.study import DiagnosisSettings

DAY = 86400.0
SLOPES = np.array([[1.0, 0.0], [0.3, 0.9], [-0.6, 0.7]]) * 1e-6
SPEED, WAVENUMBER, KAPPA = 0.1, 2.0 * np.pi / 100e3, 100.0


def tensor_of(fluxes, slopes=SLOPES):
    cell = (..., None, None, None)
    equations = normal_equations(
        np.asarray(fluxes)[cell], np.asarray(slopes)[cell], np.ones((1, 1, 1))
    )
    return least_squares_tensor(equations)[0, 0, 0]


def sheared(flux_per_gradient, kappa, slopes=SLOPES):
    """Fluxes of tracers in a flow along x that varies along y: only G_x makes anomalies."""
    g_x, g_y = np.asarray(slopes).T
    return np.stack([flux_per_gradient * g_x - kappa * g_x, -kappa * g_y], axis=1)


def spectral_flux(u, kappa, dy, dt=None):
    """Mean of u c' where c_t - kappa c_yy = -u, for u of shape (y,) or (time, y)."""
    length = 2.0 * np.pi * np.fft.fftfreq(u.shape[-1], dy)
    symbol = kappa * length**2 + 0j
    if dt is not None:
        symbol = symbol + 2j * np.pi * np.fft.fftfreq(len(u), dt)[:, None]
    forcing = -np.fft.fftn(u)
    still = symbol == 0.0
    c = np.fft.ifftn(np.where(still, 0.0, forcing) / np.where(still, 1.0, symbol)).real
    return float((u * c).mean())


# Taylor 1953, Proc. R. Soc. A 219, 186-203, and Aris 1956, Proc. R. Soc. A 235, 67-77:
# K_xx = kappa + <(int u'' dy)^2>/kappa; K_yy = kappa.
def test_a_steady_sinusoidal_shear_disperses_as_it_should():
    y = np.arange(32) * 100e3 / 32
    flux = spectral_flux(SPEED * np.cos(WAVENUMBER * y), KAPPA, 100e3 / 32)
    tensor = tensor_of(sheared(flux, KAPPA))
    excess = SPEED**2 / (2.0 * KAPPA * WAVENUMBER**2)
    assert excess == pytest.approx(12_665.15, abs=0.005)
    np.testing.assert_allclose(tensor, [[excess + KAPPA, 0.0], [0.0, KAPPA]], rtol=1e-10, atol=1e-7)


def finite_volume_flux(profile, width, kappa, cells):
    """Mean of u'' c' between walls without flux, second order in the cell width."""
    step = width / cells
    speed = profile((np.arange(cells) + 0.5) * step)
    departure = speed - speed.mean()
    # The flux of c through each face is the running integral of u''.
    slope = np.cumsum(departure)[:-1] * step / kappa
    c = np.concatenate([[0.0], np.cumsum(slope) * step])
    return float((departure * (c - c.mean())).mean())


@pytest.mark.parametrize(
    ("profile", "factor"),
    [
        # Plane Poiseuille flow of mean 0.02 m/s; Couette flow between walls at 0 and 0.02 m/s.
        (lambda y: 6.0 * 0.02 * y / 5e3 * (1.0 - y / 5e3), 1.0 / 210.0),
        (lambda y: 0.02 * y / 5e3, 1.0 / 120.0),
    ],
)
def test_flow_between_walls_disperses_as_it_should(profile, factor):
    kappa, width = 10.0, 5e3
    exact = kappa * (1.0 + factor * (0.02 * width / kappa) ** 2)
    errors = []
    for cells in (50, 100, 200):
        tensor = tensor_of(sheared(finite_volume_flux(profile, width, kappa, cells), kappa))
        errors.append(tensor[0, 0] - exact)
        np.testing.assert_allclose(tensor[1], [0.0, kappa], atol=1e-10)
    assert abs(errors[-1]) < 1e-3 * exact
    # Second order at least: halving the cells divides the error by four or more.
    assert np.all(np.divide(errors[:-1], errors[1:]) > 3.95)


# Young, Rhines and Garrett 1982, J. Phys. Oceanogr. 12, 515-527; Zeldovich 1982, Dokl. Akad.
# Nauk SSSR 266, 821-826 (both from memory; two lines of algebra).
@pytest.mark.parametrize(
    ("travelling", "kappa", "excess"),
    [(False, 100.0, 163.62), (True, 100.0, 327.24), (False, 614.02, 515.66)],
)
def test_an_oscillating_shear_disperses_as_it_should(travelling, kappa, excess):
    frequency = 2.0 * np.pi / (30 * DAY)
    y, t = np.arange(16) * 100e3 / 16, np.arange(16)[:, None] * 30 * DAY / 16
    if travelling:
        u = SPEED * np.cos(WAVENUMBER * y - frequency * t)
    else:
        u = SPEED * np.cos(WAVENUMBER * y) * np.cos(frequency * t)
    tensor = tensor_of(sheared(spectral_flux(u, kappa, 100e3 / 16, 30 * DAY / 16), kappa))
    rate = kappa * WAVENUMBER**2
    exact = (0.5 if travelling else 0.25) * SPEED**2 * rate / (rate**2 + frequency**2)
    assert tensor[0, 0] - kappa == pytest.approx(excess, abs=0.01)
    np.testing.assert_allclose(tensor, [[kappa + exact, 0.0], [0.0, kappa]], rtol=1e-10, atol=1e-9)


@cache
def cell_problem(peclet, modes):
    """Fourier coefficients of u, v and of the anomalies for unit gradients along x and y.

    ``u.grad c - lap c = -u.G`` for psi = Pe sin x sin y; modes (m, n) with m + n even, all
    that the flow excites.
    """
    m = np.arange(-modes, modes + 1)
    size = len(m)
    up = diags_array(np.ones(size - 1), offsets=-1)
    sine, cosine = (up - up.T) / 2j, (up + up.T) / 2.0
    slope, one = diags_array(1j * m), identity(size)
    advection = peclet * (kron(cosine, sine @ slope) - kron(sine @ slope, cosine))
    laplacian = kron(slope @ slope, one) + kron(one, slope @ slope)
    kept = ((m[:, None] + m) % 2 == 0).ravel()
    kept[size * size // 2] = False
    unit = np.zeros(size * size)
    unit[size * size // 2] = 1.0
    u, v = -peclet * (kron(sine, cosine) @ unit), peclet * (kron(cosine, sine) @ unit)
    factor = splu((advection - laplacian).tocsr()[kept][:, kept].tocsc())
    coefficients = np.zeros((4, size * size), complex)
    coefficients[0], coefficients[1] = u, v
    for row, flow in enumerate((u, v)):
        coefficients[2 + row, kept] = factor.solve(-flow[kept])
    return coefficients.reshape(4, size, size)


# Cellular flow psi = (U/k) sin kx sin ky, Pe = U/(k kappa). For large Pe K/kappa tends to
# 1.0655 sqrt(Pe): Soward 1987, J. Fluid Mech. 180, 267-295; Rosenbluth et al. 1987, Phys. Rev.
# Lett. 58, 2105 (from memory). The table was computed outside this package.
@pytest.mark.parametrize(
    ("peclet", "modes", "enhancement"),
    [(0.1, 8, 1.001249219), (1.0, 12, 1.117730417), (10.0, 30, 3.416574503),
     (100.0, 60, 10.69345967)],
)  # fmt: skip
def test_cellular_flow_enhances_diffusion_by_the_tabled_factor(peclet, modes, enhancement):
    u, v, c_x, c_y = cell_problem(peclet, modes)
    kappa = SPEED / (WAVENUMBER * peclet)
    covariance = np.array([[np.vdot(flow, c).real for c in (c_x, c_y)] for flow in (u, v)])
    fluxes = kappa * SLOPES @ (covariance - np.eye(2)).T
    tensor = tensor_of(fluxes) / kappa
    np.testing.assert_allclose(tensor, enhancement * np.eye(2), rtol=1e-6, atol=1e-9)
    if peclet < 1.0:
        assert tensor[0, 0] == pytest.approx(1.0 + peclet**2 / 8.0, abs=1e-6)
    if peclet == 100.0:
        assert tensor[0, 0] / np.sqrt(peclet) == pytest.approx(1.0655, abs=0.005)


def test_an_ensemble_of_phases_of_the_cellular_flow_gives_its_tensor():
    # Members see the flow at evenly spaced phases: their covariance is the mean over a cell.
    peclet, phases = 10.0, 16
    kappa = SPEED / (WAVENUMBER * peclet)
    coefficients = cell_problem(peclet, 30)
    m = np.arange(-30, 31)
    wave = np.exp(2j * np.pi * m[:, None] * np.arange(phases) / phases)
    u, v, c_x, c_y = np.einsum("kmn,mp,nq->kpq", coefficients, wave, wave).real.reshape(4, -1)
    velocity = (u + 1j * v) * WAVENUMBER * kappa
    displacement = -(c_x + 1j * c_y) / WAVENUMBER
    ensemble = uniform_eddies(box(1, 2, 2), velocity[None], displacement[None])
    statistics = diagnose(ensemble, DiagnosisSettings(coarsen=1, floor=0.0))
    # Phases are not a random sample: N/(N-1) too much. Molecular diffusion adds its own.
    members = phases**2
    excess = (3.416574503 - 1.0) * kappa * members / (members - 1)
    for name, exact in (("xx", excess), ("xy", 0.0), ("yx", 0.0), ("yy", excess)):
        found = statistics[f"transport_tensor_{name}"].values
        np.testing.assert_allclose(found, exact, rtol=1e-5, atol=1e-5 * excess)


# Plumb 1979, J. Atmos. Sci. 36, 1699-1704 (from memory).
@pytest.mark.parametrize("relaxation", [0.0, 1.0 / (50 * DAY)])
def test_a_plane_wave_cannot_be_described_by_a_symmetric_or_diagonal_tensor(relaxation):
    exact = exact_plane_wave_tensor(0.1, 0.05, 2.0 * np.pi / (20 * DAY), relaxation=relaxation)
    fluxes = -GRADIENTS @ exact.T
    tensor = tensor_of(fluxes[:-1], GRADIENTS[:-1])
    np.testing.assert_allclose(tensor, exact, rtol=1e-10, atol=1e-9)
    size = np.linalg.norm(fluxes[-1])
    withheld = GRADIENTS[-1]
    assert np.linalg.norm(fluxes[-1] + tensor @ withheld) < 1e-10 * size
    for cut in (0.5 * (tensor + tensor.T), np.diag(np.diag(tensor))):
        assert np.linalg.norm(fluxes[-1] + cut @ withheld) > 0.95 * size
    # Nor does the best symmetric tensor for the tracers used do better.
    design = np.array([
        row for g_x, g_y in GRADIENTS[:-1] for row in ((g_x, g_y, 0.0), (0.0, g_x, g_y))
    ])  # fmt: skip
    xx, xy, yy = np.linalg.lstsq(design, -fluxes[:-1].ravel(), rcond=None)[0]
    best = np.array([[xx, xy], [xy, yy]])
    rest = np.linalg.norm(fluxes[:-1] + GRADIENTS[:-1] @ best.T)
    assert rest > 0.5 * np.linalg.norm(fluxes[:-1])
