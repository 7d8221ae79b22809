"""Deformation radii of an open climatology at places all over the ocean.

Temperature and salinity of Levitus' annual climatology and depths of ETOPO5 come with the
Debian package ferret-datasets.
"""

from __future__ import annotations

from pathlib import Path

import gsw
import numpy as np
import pytest
from scipy.io import netcdf_file

from features_cases import mean_state
from learnclosure.features.mean_state import MeanState
from learnclosure.features.stratification import gravity_wave_speed, radius_of_speed, wkb_speed

DATA = Path("/usr/share/ferret-vis/data")
CLIMATOLOGY, DEPTHS = DATA / "levitus_climatology.cdf", DATA / "etopo5.cdf"
LAYERS = 120

# Longitude east, latitude; speed of the first mode in m/s, its radius in km and its speed in
# the WKB approximation in m/s, computed independently from the same data with 2000 levels;
# range of Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460 (from memory).
PLACES = [
    (219.5, 0.5, 2.729, 244.1, 3.071, (230, 240)),
    (199.5, 10.5, 2.804, 105.5, 3.240, (100, 110)),
    (80.5, -15.5, 3.064, 78.6, 3.435, (75, 85)),
    (209.5, 24.5, 3.089, 51.1, 3.137, (50, 50)),
    (296.5, 31.5, 2.999, 39.4, 2.858, (40, 40)),
    (339.5, -30.5, 2.705, 36.5, 2.883, (35, 40)),
    (190.5, 40.5, 2.748, 29.0, 2.737, (25, 30)),
    (343.5, 49.5, 2.301, 20.8, 2.203, (20, 20)),
    (215.5, 50.5, 2.083, 18.5, 2.301, (15, 20)),
    (140.5, -55.5, 1.453, 12.1, 1.523, (10, 15)),
    (308.5, 57.5, 1.074, 8.7, 1.228, (0, 10)),
    (0.5, 70.5, 0.963, 7.0, 0.861, (0, 10)),
]

pytestmark = pytest.mark.skipif(
    not (CLIMATOLOGY.exists() and DEPTHS.exists()),
    reason="the Debian package ferret-datasets is not installed",
)


def squared_frequency(profile_t, profile_s, depth, longitude, latitude):
    """N2 between the standard depths of one column and the depths it belongs to."""
    pressure = gsw.p_from_z(-depth, latitude)
    salinity = gsw.SA_from_SP(profile_s, pressure, longitude, latitude)
    temperature = gsw.CT_from_t(salinity, profile_t, pressure)
    squared, middle = gsw.Nsquared(salinity, temperature, pressure, latitude)
    return np.maximum(squared, 1e-8), -gsw.z_from_p(middle, latitude)


@pytest.fixture(scope="module")
def columns():
    """Mean state of the columns of all places, one beside the other."""
    with netcdf_file(CLIMATOLOGY, mmap=False) as data:
        x, y, z = (np.array(data.variables[name][:]) for name in
                   ("XAXLEVITR", "YAXLEVITR", "ZAXLEVITR"))  # fmt: skip
        temperature, salinity = (np.array(data.variables[n][:]) for n in ("TEMP", "SALT"))
    with netcdf_file(DEPTHS, mmap=False) as data:
        relief = data.variables["ROSE"]
        west, south = (np.array(data.variables[name][:]) for name in relief.dimensions[::-1])
        relief = np.array(relief[:], dtype=np.float64)
    gravity, thickness, bottoms = [], [], []
    for longitude, latitude, *_ in PLACES:
        i, j = np.argmin(np.abs((x - longitude + 180) % 360 - 180)), np.argmin(np.abs(y - latitude))
        sea = temperature[:, j, i] > -1e9
        squared, middle = squared_frequency(
            temperature[sea, j, i], salinity[sea, j, i], z[sea], longitude, latitude
        )
        near_x = np.abs((west - longitude + 180) % 360 - 180) <= 0.5
        near_y = np.abs(south - latitude) <= 0.5
        bottom = max(-relief[np.ix_(near_y, near_x)].mean(), z[sea].max())
        step = bottom / LAYERS
        interfaces = step * np.arange(1, LAYERS)
        gravity.append(np.interp(interfaces, middle, squared) * step)
        thickness.append(np.full(LAYERS, step))
        bottoms.append(bottom)
    latitude = np.array([place[1] for place in PLACES])
    base = mean_state(rows=1, columns=len(PLACES), thickness=(1.0,) * LAYERS,
                      gravity=(1.0,) * (LAYERS - 1))  # fmt: skip
    return MeanState(
        **{
            **base.__dict__,
            "layer_thickness": np.array(thickness).T[:, None],
            "reduced_gravity": np.array(gravity).T[:, None],
            "coriolis_parameter": gsw.f(latitude)[None],
            "planetary_beta_y": (
                2 * 7.292115e-5 * np.cos(np.radians(latitude)) / 6.371e6
            )[None],
            "sea_floor_depth": np.array(bottoms)[None],
        }
    )  # fmt: skip


@pytest.fixture(scope="module")
def speed(columns):
    return gravity_wave_speed(columns)


def test_radii_and_speeds_of_twelve_places(columns, speed):
    np.testing.assert_allclose(speed[0], [place[2] for place in PLACES], rtol=0.01)
    radius = radius_of_speed(columns, speed)[0] * 1e-3
    np.testing.assert_allclose(radius, [place[3] for place in PLACES], rtol=0.01)


def test_the_wkb_speed_errs_as_it_should(columns):
    wkb = [place[4] for place in PLACES]
    np.testing.assert_allclose(wkb_speed(columns)[0], wkb, rtol=0.03)


def test_radii_lie_where_the_published_atlas_has_them(columns, speed):
    found = radius_of_speed(columns, speed)[0] * 1e-3
    for radius, (*_, (low, high)) in zip(found, PLACES, strict=True):
        assert 0.85 * low <= radius <= 1.15 * high
