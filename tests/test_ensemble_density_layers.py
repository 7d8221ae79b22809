"""Ensembles on levels seen on layers: what they hold, what they record, what they refuse."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import gsw
import numpy as np
import pytest
import xarray as xr

from diagnosis_cases import box, random_ensemble
from ensemble_cases import write_classic
from layers_cases import level_ensemble, level_grid, sampled_layers, weighted_moments
from learnclosure.ensemble.averaging import ThicknessWeighted, averaged
from learnclosure.ensemble.density_layers import DensityLayers
from learnclosure.ensemble.layer_quantity import reference_pressure
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.errors import GridError, RoleError, SourceError, StudyError, UnitError
from learnclosure.study import (
    DiagnosisSettings,
    EnsembleTable,
    LayerSettings,
    parse_study,
    read_study,
)
from learnclosure.workflow import diagnose_study

EDGES = (20.0, 10.0, 5.0)


def by_warmth(**more):
    return LayerSettings(**{"quantity": "warmth", "edges": EDGES, **more})


def said(layers):
    return "; ".join(layers.assumptions)


def test_every_member_and_time_is_remapped_by_its_own_profile():
    ensemble = level_ensemble()
    layers = DensityLayers(ensemble, by_warmth())
    assert layers.grid.vertical == "layers"
    assert layers.grid.shape == (4, 5, 7)
    np.testing.assert_array_equal(layers.edges, EDGES)
    for time in range(2):
        fields = layers.fields(time)
        for member, row, column in ((0, 0, 0), (3, 4, 6), (1, 2, 3)):
            names = ("x_velocity", "dye_a", "buoyancy")
            levels = np.stack(
                [ensemble.values[name][time, member, :, row, column] for name in names]
            )
            content, thickness = sampled_layers(
                levels,
                -ensemble.values["warmth"][time, member, :, row, column],
                ensemble.grid.layer_thickness[:, row, column],
                -np.array(EDGES),
                linear=True,
            )
            found = fields["thickness"][member, :, row, column]
            np.testing.assert_allclose(found, thickness, atol=0.5)
            for name, expected in zip(names, content, strict=True):
                mean = fields[name][member, :, row, column]
                np.testing.assert_allclose(mean * found, expected, atol=0.5)


def test_nothing_is_lost_between_levels_and_layers():
    ensemble = level_ensemble(heave=0.2)
    layers = DensityLayers(ensemble, by_warmth(least_thickness=1e-9, least_share=1e-9))
    fields = layers.fields(1)
    thickness = ensemble.grid.layer_thickness
    for name in ("x_velocity", "y_velocity", "dye_a", "dye_c", "warmth", "buoyancy"):
        content = (fields[name] * fields["thickness"]).sum(axis=1)
        np.testing.assert_allclose(
            content, (ensemble.values[name][1] * thickness).sum(axis=1), rtol=1e-12, atol=1e-10
        )
    np.testing.assert_allclose(fields["thickness"].sum(axis=1), 2000.0, rtol=1e-12 * 10)


def test_the_layered_grid_holds_mean_thickness_and_stacks_up_to_the_depth():
    ensemble = level_ensemble()
    layers = DensityLayers(ensemble, by_warmth(least_thickness=1e-9, least_share=1e-9))
    mean = np.mean([layers.fields(time)["thickness"].mean(axis=0) for time in range(2)], axis=0)
    np.testing.assert_allclose(layers.grid.layer_thickness, mean, rtol=1e-12)
    np.testing.assert_allclose(layers.grid.layer_thickness.sum(axis=0), 2000.0, rtol=1e-12)
    assert layers.grid.reduced_gravity is None


def test_edges_may_be_given_in_either_order():
    ensemble = level_ensemble()
    down = DensityLayers(ensemble, by_warmth())
    up = DensityLayers(ensemble, by_warmth(edges=EDGES[::-1]))
    np.testing.assert_array_equal(up.edges, down.edges)
    np.testing.assert_array_equal(up.fields(0)["dye_a"], down.fields(0)["dye_a"])


def test_layers_by_count_hold_equal_volumes_and_their_edges_are_recorded():
    ensemble = level_ensemble(heave=0.3, times=3)
    settings = LayerSettings(quantity="warmth", count=4, least_thickness=1e-9, least_share=1e-9)
    layers = DensityLayers(ensemble, settings)
    volume = layers.grid.layer_thickness.sum(axis=(1, 2))
    # The census counts whole levels, layers cut them linearly.
    np.testing.assert_allclose(volume / volume.sum(), 0.25, atol=0.12)
    assert (np.diff(layers.edges) < 0.0).all()
    assert "edges of layers chosen for equal volumes" in said(layers)
    np.testing.assert_array_equal(layers.attributes["layer_edges"], layers.edges)


def test_more_layers_than_values_are_refused():
    ensemble = level_ensemble(heave=0.0)
    ensemble.values["warmth"][:] = np.where(np.arange(6) < 5, 10.0, 4.0)[:, None, None]
    with pytest.raises(StudyError, match="does not hold as many layers of equal volume"):
        DensityLayers(ensemble, LayerSettings(quantity="warmth", count=50))


def outcropping():
    """Warm water is missing in two of four members over half of the box."""
    ensemble = level_ensemble(heave=0.0)
    ensemble.values["warmth"][:, :2, :, :, :3] = np.minimum(
        ensemble.values["warmth"][:, :2, :, :, :3], 18.0
    )
    return ensemble


def test_an_outcropping_layer_has_its_share_reported_and_is_not_filled():
    layers = DensityLayers(outcropping(), by_warmth(least_share=0.4))
    np.testing.assert_allclose(layers.valid_share[0, :, :3], 0.5)
    np.testing.assert_allclose(layers.valid_share[0, :, 3:], 1.0)
    thickness = layers.fields(0)["thickness"]
    assert (thickness[:2, 0, :, :3] == 0.0).all()
    assert (thickness[2:, 0] > 0.0).all()
    assert (layers.fields(0)["dye_a"][:2, 0, :, :3] == 0.0).all()
    assert "layer 1 outcrops: it is there in 78.6%" in said(layers)
    assert "in 50.0% at least" in said(layers)


def test_a_layer_that_outcrops_too_often_is_land_there():
    layers = DensityLayers(outcropping(), by_warmth(least_share=0.6))
    mask = layers.grid.geometry.mask
    assert not mask[0, :, :3].any()
    assert mask[0, :, 3:].all()
    assert (layers.grid.layer_thickness[0, :, :3] == 0.0).all()
    share = float(said(layers).split("% of the water lies where")[0].split("; ")[-1])
    lost = thickness_lost(layers)
    assert share == pytest.approx(100.0 * lost, abs=0.01)


def thickness_lost(layers):
    """Share of the water outside the layers' sea, from their grid alone."""
    return 1.0 - layers.grid.layer_thickness.sum() / (2000.0 * 35)


def test_plain_averages_need_a_layer_in_every_member():
    layers = DensityLayers(outcropping(), by_warmth(), weighted=False)
    assert not layers.weighted
    assert not layers.grid.geometry.mask[0, :, :3].any()


def test_inverted_columns_are_counted():
    ensemble = level_ensemble(heave=0.0, members=4, times=2)
    ensemble.values["warmth"][0, 1, 3, 2, 2] = 3.0
    layers = DensityLayers(ensemble, by_warmth())
    assert layers.attributes["layer_inverted_columns_share"] == pytest.approx(1 / (35 * 8))
    assert "warmth is not monotonic with depth in 0.36% of the columns" in said(layers)
    assert "assigned to layers by value" in said(layers)


def test_columns_without_inversion_are_not_mentioned():
    assert "monotonic" not in said(DensityLayers(level_ensemble(heave=0.0), by_warmth()))


def test_land_and_shallow_columns_have_no_layers_below_the_floor():
    mask = np.ones((6, 5, 7), bool)
    mask[:, 0, 0] = False
    mask[3:, 1, 1] = False
    layers = DensityLayers(level_ensemble(level_grid(mask=mask), heave=0.0), by_warmth())
    assert not layers.grid.geometry.mask[:, 0, 0].any()
    # Below 5 degrees there is only the sixth level; the column ends at the third.
    assert not layers.grid.geometry.mask[3, 1, 1]
    assert layers.grid.geometry.mask[3, 2, 2]


def test_the_weighted_averages_of_the_integer_example():
    # h=(1,3), u=(.1,.3), c=(10,20): <huc> = <h> u c + <h u'' c''> = 8.75 + .75 (de Szoeke
    # and Bennett 1993, J. Phys. Oceanogr. 23; Young 2012, J. Phys. Oceanogr. 42, 692-707).
    h, u, c = np.array([1.0, 3.0]), np.array([0.1, 0.3]), np.array([10.0, 20.0])
    thickness, velocity, tracer, flux = weighted_moments(h, u, c)
    assert (thickness, tracer) == (2.0, 17.5)
    assert velocity == pytest.approx(0.25, rel=1e-15)
    assert flux == pytest.approx(0.75, rel=1e-14)
    assert (h * u * c).mean() == pytest.approx(9.5)
    assert thickness * velocity * tracer + flux == pytest.approx(9.5)
    assert velocity - u.mean() == pytest.approx(0.05)


def test_two_columns_remapped_are_the_integer_example():
    # Two members of two levels, each 2 m: the upper layer is 1 and 3 m thick in them.
    grid = level_grid(1, 1, thickness=(1.0, 2.0, 1.0))
    ensemble = level_ensemble(grid, members=2, times=1)
    values = ensemble.values
    for member, (warm, speed, dye) in enumerate(((1, 0.1, 10.0), (2, 0.3, 20.0))):
        values["warmth"][0, member, :, 0, 0] = np.where(np.arange(3) < warm, 15.0, 2.0)
        values["x_velocity"][0, member] = speed
        values["dye_a"][0, member] = dye
    settings = by_warmth(edges=(10.0,), reconstruction="constant", least_thickness=0.1)
    fields = DensityLayers(ensemble, settings).fields(0)
    np.testing.assert_array_equal(fields["thickness"][:, 0, 0, 0], [1.0, 3.0])
    found = weighted_moments(
        *(fields[name][:, 0, 0, 0] for name in ("thickness", "x_velocity", "dye_a"))
    )
    np.testing.assert_allclose(found, [2.0, 0.25, 17.5, 0.75], rtol=1e-14)


def test_the_models_own_density_gives_buoyancy_too():
    ensemble = level_ensemble(units={"warmth": "kg m-3"})
    ensemble.values["warmth"] = 1030.0 - 0.2 * ensemble.values["warmth"]
    del ensemble.values["buoyancy"]
    layers = DensityLayers(ensemble, by_warmth(edges=(26.0, 28.0, 29.0)))
    np.testing.assert_allclose(layers.edges, [1026.0, 1028.0, 1029.0])
    assert "density anomalies from 1000 kg m-3" in said(layers)
    assert layers.has_buoyancy
    fields = layers.fields(0)
    wet = fields["thickness"] > 0.0
    np.testing.assert_allclose(
        fields["buoyancy"][wet], -9.81 * (fields["warmth"][wet] - 1025.0) / 1025.0, atol=1e-12
    )


def test_a_varying_thickness_of_levels_is_used():
    ensemble = level_ensemble(heave=0.0)
    thickness = np.broadcast_to(ensemble.grid.layer_thickness, ensemble.values["dye_a"].shape)
    ensemble.values["thickness"] = thickness * 1.5
    fields = DensityLayers(ensemble, by_warmth()).fields(0)
    np.testing.assert_allclose(fields["thickness"].sum(axis=1), 3000.0)
    ensemble.values["thickness"] = thickness * np.where(np.arange(7) == 3, -1.0, 1.0)
    with pytest.raises(SourceError, match=r"levels have negative thickness .*found 120 cells"):
        DensityLayers(ensemble, by_warmth()).fields(0)


@pytest.mark.parametrize(
    ("settings", "error", "message"),
    [
        ({"quantity": "salt"}, RoleError, "quantity of layers is unknown .*found salt.*warmth"),
        ({"quantity": "temperature"}, RoleError, "layers of temperature need a temperature"),
        (
            {"quantity": "potential-density"},
            RoleError,
            "layers of potential density need a temperature",
        ),
        ({"edges": (300.0,)}, StudyError, "edges of layers separate no water .*found 300"),
        ({"units": "m"}, UnitError, "unit measures something else"),
        ({"units": "ppt"}, UnitError, "unknown unit .*parts per trillion"),
    ],
)
def test_layers_that_cannot_be_made_are_refused(settings, error, message):
    with pytest.raises(error, match=message):
        DensityLayers(level_ensemble(), by_warmth(**settings))


def test_layers_are_not_made_of_layers():
    ensemble = random_ensemble(box(2, 4, 5))
    with pytest.raises(StudyError, match=r"layers are remapped from levels .*found an ensemble on"):
        averaged(ensemble, DiagnosisSettings(layers=by_warmth(quantity="dye_a")))


def test_a_quantity_that_is_not_finite_is_refused():
    ensemble = level_ensemble()
    ensemble.values["warmth"][1, 2, 3, 1, 1] = np.nan
    with pytest.raises(SourceError, match=r"warmth is not finite in the sea .*time number 1"):
        DensityLayers(ensemble, by_warmth())


def test_a_quantity_that_does_not_vary_with_depth_is_refused():
    ensemble = level_ensemble()
    ensemble.values["warmth"][:] = 7.0
    with pytest.raises(StudyError, match="does not vary with depth"):
        DensityLayers(ensemble, by_warmth())


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("quantity = 'buoyancy'", "either 'edges' or 'count'"),
        ("edges = [1.0, 2.0]\ncount = 3", "either 'edges' or 'count'"),
        ("edges = [1.0, 3.0, 2.0]", "edges must grow or fall throughout"),
        ("count = 1", "greater than or equal to 2"),
    ],
)
def test_a_study_that_contradicts_itself_on_layers(text, message):
    start = '[[ensemble]]\nname = "north"\nfiles = "*.nc"\n[diagnosis.layers]\n'
    with pytest.raises(StudyError, match=message):
        parse_study(start + text)


@pytest.mark.parametrize("given", [2000.0, "2000 dbar", "20 MPa", "2e7 Pa"])
def test_reference_pressures_in_any_unit(given):
    assert reference_pressure(given) == pytest.approx(2e7)


def test_a_depth_is_no_reference_pressure():
    with pytest.raises(UnitError, match="reference_pressure: a unit measures something else"):
        reference_pressure("2000 m")
    with pytest.raises(StudyError, match="not negative, in dbar"):
        reference_pressure(-10.0)


WATER = {"temp": {"units": "degC"}, "salt": {"units": "g kg-1"}}


def seawater_files(folder, temperature=None):
    """Two members of two levels with temperature, salinity and a density of their own."""

    def change(number, dataset):
        random = np.random.default_rng([7, number])
        dims, shape = dataset["dye_a"].dims, dataset["dye_a"].shape
        warm = np.array([18.0, 4.0])[:, None, None]
        dataset = dataset.drop_vars("reduced_gravity")
        dataset["temp"] = (dims, warm + random.normal(size=shape), temperature or WATER["temp"])
        dataset["salt"] = (dims, 35.0 + 0.1 * random.normal(size=shape), WATER["salt"])
        dataset["rho"] = (dims, 1030.0 - 0.2 * dataset["temp"].values, {"units": "kg/m3"})
        dataset["psi"] = (("y", "x"), np.zeros(shape[-2:]), {"units": "m2 s-1"})
        dataset.attrs["vertical"] = "levels"
        return dataset

    write_classic(folder, members=2, change=change)


def opened(folder, **seawater):
    table = EnsembleTable(
        name="north",
        files="*.nc",
        variables={"temperature": "temp", "salinity": "salt"},
        seawater={"equation": "teos-10", **seawater},
    )
    return open_ensemble(table, folder)


def raw(ensemble, name, time):
    return np.stack([member.dataset[name].values[time] for member in ensemble.members])


def test_potential_density_of_files_at_the_studys_pressure(tmp_path):
    seawater_files(tmp_path)
    with opened(tmp_path, temperature_kind="potential") as ensemble:
        settings = LayerSettings(
            edges=(36.0,), reference_pressure=2000.0, reconstruction="constant"
        )
        layers = DensityLayers(ensemble, settings)
        salinity = raw(ensemble, "salt", 1)
        # sigma2 of TEOS-10 (IOC, SCOR and IAPSO 2010).
        sigma = gsw.sigma2(salinity, gsw.CT_from_pt(salinity, raw(ensemble, "temp", 1)))
        found = layers.fields(1)["thickness"]
        text = said(layers)
    thickness = np.array([1000.0, 3000.0])[:, None, None]
    expected = np.stack(
        [(thickness * (sigma < 36.0)).sum(axis=1), (thickness * (sigma >= 36.0)).sum(axis=1)],
        axis=1,
    )
    wet = layers.grid.geometry.mask
    np.testing.assert_allclose(found, np.where(wet, expected, 0.0))
    assert "TEOS-10 from potential temperature, referenced to 2000 dbar" in text


@pytest.mark.parametrize(
    ("settings", "edges", "note"),
    [
        ({"quantity": "temperature", "edges": (12.0,)}, [285.15], "in degrees Celsius"),
        ({"quantity": "temperature", "edges": (285.15,)}, [285.15], "as the files hold it"),
        ({"quantity": "temperature", "edges": (12.0,), "units": "degC"}, [285.15], "'temp'"),
        ({"quantity": "rho", "edges": (1028.0,), "units": "g/cm3"}, [1028e3], None),
        ({"quantity": "rho", "edges": (1.028,), "units": "g/cm3"}, [1028.0], "own 'rho'"),
        ({"quantity": "rho", "edges": (28.0,)}, [1028.0], "anomalies from 1000"),
        ({"quantity": "buoyancy", "count": 2}, None, "layers by buoyancy"),
    ],
)
def test_quantities_of_files_and_the_units_of_their_edges(tmp_path, settings, edges, note):
    seawater_files(tmp_path)
    with opened(tmp_path, temperature_kind="conservative") as ensemble:
        if note is None:
            with pytest.raises(StudyError, match=r"edges of layers separate no water"):
                DensityLayers(ensemble, LayerSettings(**settings))
            return
        layers = DensityLayers(ensemble, LayerSettings(**settings))
    if edges is not None:
        np.testing.assert_allclose(layers.edges, edges, rtol=1e-12)
    assert note in said(layers)
    assert layers.input_sha256 == ensemble.input_sha256


def test_variables_of_files_that_cannot_bound_layers(tmp_path):
    seawater_files(tmp_path)
    with opened(tmp_path, temperature_kind="conservative") as ensemble:
        with pytest.raises(RoleError, match=r"named by '.diagnosis.layers. quantity' is missing"):
            DensityLayers(ensemble, LayerSettings(quantity="sigma", count=2))
        with pytest.raises(GridError, match="psi: the quantity of layers sits on other points"):
            DensityLayers(ensemble, LayerSettings(quantity="psi", count=2))


def test_a_kind_of_temperature_that_contradicts_the_files_is_recorded(tmp_path):
    seawater_files(
        tmp_path, {"units": "degC", "standard_name": "sea_water_conservative_temperature"}
    )
    with opened(tmp_path, temperature_kind="potential") as ensemble:
        assert "the temperature is potential as the study says, although" in said(ensemble)
    with opened(tmp_path) as ensemble:
        assert "although" not in said(ensemble)


def layered(thickness_of, **more):
    ensemble = random_ensemble(box(2, 4, 5), members=4)
    shape = ensemble.values["dye_a"].shape
    ensemble.values["thickness"] = thickness_of(np.full(shape, 100.0))
    return replace(ensemble, **more)


def weighted():
    return DiagnosisSettings(averaging="thickness-weighted")


def test_layers_of_varying_thickness_are_weighted_when_the_study_says_so():
    ensemble = layered(lambda h: h)
    assert averaged(ensemble, DiagnosisSettings()) is ensemble
    assert averaged(ensemble, DiagnosisSettings(averaging="reynolds")) is ensemble
    source = averaged(ensemble, weighted())
    assert isinstance(source, ThicknessWeighted)
    assert source.weighted
    np.testing.assert_array_equal(source.fields(0)["thickness"], 100.0)
    np.testing.assert_array_equal(source.valid_share, 1.0)


def test_vanishing_layers_are_reported_and_negative_ones_refused():
    def vanish(h):
        h[:, 0, 0, 1, 1] = 0.0
        return h

    assert "layer 1 outcrops" in said(averaged(layered(vanish), weighted()))
    assert "75.0% at least" in said(averaged(layered(vanish), weighted()))

    def negative(h):
        h[1, 0, 0, 1, 1] = -3.0
        return h

    with pytest.raises(SourceError, match=r"negative or missing thickness .*time number 1"):
        averaged(layered(negative), weighted())

    def gone(h):
        h[:, :, 0, 1, 1] = 0.0
        return h

    with pytest.raises(SourceError, match=r"no thickness in any member .found 1 cells"):
        averaged(layered(gone), weighted())


def test_weights_need_layers_and_a_thickness():
    with pytest.raises(StudyError, match="need the thickness of each member"):
        averaged(random_ensemble(box(2, 4, 5)), weighted())
    with pytest.raises(StudyError, match="thickness-weighted averages need layers"):
        averaged(level_ensemble(), weighted())


FOREIGN = Path(__file__).parent.parent / "experiments" / "foreign_fixture" / "study.toml"


def test_a_study_with_layers_is_diagnosed_on_them(tmp_path):
    study = read_study(FOREIGN)
    settings = DiagnosisSettings(layers={"count": 3, "reference_pressure": "0 dbar"})
    changed = study.model_copy(update={"output": tmp_path, "diagnosis": settings})
    diagnose_study(changed, workers=1)
    with xr.open_dataset(tmp_path / "headland" / "statistics.nc") as statistics:
        assert statistics.attrs["vertical"] == "layers"
        assert "thickness-weighted average in each layer" in statistics.attrs["eddy_definition"]
        assert "layers by density" in statistics.attrs["layer_quantity"]
        assert len(np.atleast_1d(statistics.attrs["layer_edges"])) == 2
        assert "edges of layers chosen for equal volumes" in statistics.attrs["assumptions"]
        share = statistics["valid_share"].values
        thickness = statistics["layer_thickness"].values
        assert share.shape == thickness.shape
        assert ((share >= 0.0) & (share <= 1.0)).all()
        assert (share[thickness > 0.0] >= 0.5).all()
        sloping = np.isfinite(statistics["isoneutral_slope_x"].values)
        np.testing.assert_array_equal(sloping, statistics["wet_share"].values > 0.0)
