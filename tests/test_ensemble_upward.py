"""Upward velocity: which variable it is, where it sits, what stands in at surface and floor."""

from __future__ import annotations

import numpy as np
import pytest

from ensemble_cases import each, write_classic
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.ensemble.readiness import inspect_ensemble
from learnclosure.errors import GridError, RoleError, SourceError, StudyError, UnitError
from learnclosure.study import EnsembleTable, parse_study

CF = {"standard_name": "upward_sea_water_velocity", "units": "m s-1"}


def with_upward(face_values, attributes=None, dims=None):
    """Add ``w`` with the given values along the vertical."""

    def add(dataset):
        own = dims or dataset["dye_a"].dims
        sizes = [dataset.sizes.get(dim, len(face_values)) for dim in own]
        values = np.asarray(face_values, dtype=float)[:, None, None] * np.ones(sizes)
        dataset["w"] = (own, values, CF if attributes is None else attributes)
        return dataset

    return each(add)


def opened(folder, change, *, variables=None, faces=None, grid=None):
    write_classic(folder, members=2, change=change)
    return open_ensemble(table(variables, faces, grid), folder)


def table(variables=None, faces=None, grid=None):
    return EnsembleTable(
        name="north",
        files="*.nc",
        variables=variables or {},
        grid={"faces": faces or {}, **(grid or {})},
    )


INTERFACES = ("time", "interface_height", "y", "x")


@pytest.mark.parametrize(
    ("face", "values", "dims", "expected"),
    [
        (None, [2e-5, 4e-5], None, [2e-5, 4e-5]),
        ("center", [2e-5, 4e-5], None, [2e-5, 4e-5]),
        # The lower face of the lowest cell is the sea floor, not in the files.
        ("top", [2e-5, 4e-5], None, [3e-5, 2e-5]),
        # The upper face of the top cell is the surface; what stands at the floor is no flow.
        ("bottom", [2e-5, 4e-5], None, [1e-5, 1e-5]),
        ("top", [2e-5, 4e-5, 7e-5], INTERFACES, [3e-5, 2e-5]),
        ("bottom", [2e-5, 4e-5, 7e-5], INTERFACES, [3e-5, 2e-5]),
    ],
)
def test_upward_velocity_at_centres_is_the_mean_of_two_faces(
    tmp_path, face, values, dims, expected
):
    faces = {} if face is None else {"z_velocity": face}
    with opened(tmp_path, with_upward(values, dims=dims), faces=faces) as ensemble:
        found = ensemble.fields(1)["z_velocity"]
        notes = " ".join(ensemble.assumptions)
    np.testing.assert_allclose(found[1, :, 3, 4], expected, rtol=1e-12)
    assert ("mean of the two faces" in notes) == (face in ("top", "bottom"))


def test_levels_that_count_from_the_bottom_are_turned_over(tmp_path):
    with opened(
        tmp_path,
        with_upward([1e-5, 2e-5, 4e-5], dims=INTERFACES),
        faces={"z_velocity": "top"},
        grid={"top": "last", "layer_thickness": [3000.0, 1000.0]},
    ) as ensemble:
        found = ensemble.fields(0)["z_velocity"]
    # Turned over, the surface has 4e-5, then 2e-5; the floor counts as closed.
    np.testing.assert_allclose(found[0, :, 0, 0], [3e-5, 1e-5], rtol=1e-12)


def test_no_flow_goes_through_a_sea_floor_inside_the_grid(tmp_path):
    def change(number, dataset):
        dataset = with_upward([2e-5, 4e-5])(number, dataset)
        for name in ("dye_a", "dye_b", "dye_c", "dye_d", "x_velocity", "y_velocity"):
            dataset[name][:, 1, :4, :4] = np.nan
        dataset["w"][:, 1, :4, :4] = np.nan
        return dataset

    with opened(tmp_path, change, faces={"z_velocity": "top"}) as ensemble:
        found = ensemble.fields(0)["z_velocity"]
    np.testing.assert_allclose(found[0, :, 0, 0], [1e-5, 0.0], rtol=1e-12)
    np.testing.assert_allclose(found[0, :, 8, 8], [3e-5, 2e-5], rtol=1e-12)


def test_its_units_are_converted_and_shown(tmp_path):
    change = with_upward([864.0, 864.0], {**CF, "units": "m/day"})
    write_classic(tmp_path, members=2, change=change)
    with open_ensemble(table(), tmp_path) as ensemble:
        np.testing.assert_allclose(ensemble.fields(0)["z_velocity"], 1e-2, rtol=1e-12)
    roles = {line.part: line for line in inspect_ensemble(table(), tmp_path).roles}
    assert roles["z_velocity"].variable == "w"
    assert roles["z_velocity"].units_after == "m s-1"


def test_without_it_nothing_changes(tmp_path):
    with opened(tmp_path, with_upward([1.0, 1.0], {"units": "m s-1"})) as ensemble:
        assert "z_velocity" not in ensemble.fields(0)


def test_one_at_unknown_points_is_used_only_when_named(tmp_path):
    write_classic(tmp_path, members=2, change=with_upward([1.0, 2.0, 3.0], dims=INTERFACES))
    with open_ensemble(table(), tmp_path) as ensemble:
        assert "z_velocity" not in ensemble.fields(0)
    with pytest.raises(GridError, match=r"w: the upward velocity sits on other points.*z_velocity"):
        open_ensemble(table({"z_velocity": "w"}), tmp_path)


@pytest.mark.parametrize(
    ("change", "options", "error", "message"),
    [
        (
            with_upward([1.0] * 5, dims=INTERFACES),
            {"faces": {"z_velocity": "top"}},
            GridError,
            "does not fit the cells",
        ),
        (
            with_upward([1.0, 1.0], {**CF, "units": "Pa s-1"}),
            {},
            UnitError,
            "w: a unit measures something else",
        ),
        (
            with_upward([1.0, 1.0]),
            {"variables": {"z_velocity": "omega"}},
            RoleError,
            "omega: the variable named by .* z_velocity' is missing",
        ),
    ],
)
def test_an_upward_velocity_that_cannot_be_used_is_refused(
    tmp_path, change, options, error, message
):
    with pytest.raises(error, match=message):
        opened(tmp_path, change, **options)


def test_gaps_in_the_sea_are_refused(tmp_path):
    def change(number, dataset):
        dataset = with_upward([1e-5, 1e-5])(number, dataset)
        dataset["w"][2, 1, 5, 5] = np.nan
        return dataset

    with (
        opened(tmp_path, change) as ensemble,
        pytest.raises(SourceError, match=r"w: values are missing in the sea .*time number 2"),
    ):
        ensemble.fields(2)


@pytest.mark.parametrize(
    ("part", "face"), [("x_velocity", "top"), ("y_velocity", "bottom"), ("z_velocity", "east")]
)
def test_faces_a_velocity_cannot_sit_on(part, face):
    text = f'[[ensemble]]\nname = "a"\nfiles = "*.nc"\n[ensemble.grid]\nfaces = {{{part}="{face}"}}'
    with pytest.raises(StudyError, match=f"{part} cannot sit on the {face} face of a cell"):
        parse_study(text)
