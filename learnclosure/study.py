"""The study file: what to read, how to diagnose, what to train and what to ship.

A study is a TOML file. Every key is described here once; unknown keys are errors.
All numbers are in SI units unless the description says otherwise.
"""

from __future__ import annotations

import tomllib
from itertools import pairwise
from pathlib import Path
from typing import Annotated, Literal, get_args

from packaging.licenses import InvalidLicenseExpression, canonicalize_license_expression
from pydantic import (
    BaseModel,
    ConfigDict,
    Field,
    ValidationError,
    field_validator,
    model_validator,
)

from learnclosure.errors import StudyError
from learnclosure.features.frames import Frame
from learnclosure.features.point_features import FeatureGroup

Face = Literal["center", "east", "west", "north", "south", "top", "bottom"]
Family = Literal["mean-field", "local-energy"]
Regressor = Literal["ridge", "extra-trees", "histogram-boosting", "mlp", "trees-and-mlp"]
Target = Literal["linear", "log-cholesky"]
GaugeBoundary = Literal["no-flux", "zero-potential", "least-flux"]


RADIUS_OVER_SMOOTHING = 1.5
"""The tensor is kept smooth over two thirds of what eddies blur gradients over."""
BaselineName = Literal[
    "constant",
    "eady-visbeck",
    "eady-visbeck-published",
    "stone",
    "stone-published",
    "held-larichev",
    "held-larichev-published",
    "eke-mixing-length",
    "eke-mixing-length-published",
    "bates",
    "bates-published",
    "ferrari-nikurashin",
    "ferrari-nikurashin-published",
    "energy-bounded",
    "energy-bounded-published",
    "constant-tuned",
    "local-scalar",
]


class Section(BaseModel):
    """Common behaviour of all tables of a study: closed and immutable."""

    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=True)


class VariableNames(Section):
    """Names of variables in the files, only where attributes do not tell."""

    x_velocity: str | None = Field(None, description="velocity along x")
    y_velocity: str | None = Field(None, description="velocity along y")
    z_velocity: str | None = Field(None, description="upward velocity, for tensors in depth axes")
    tracers: tuple[str, ...] | None = Field(
        None, description="tracers the tensor is determined from, at least two"
    )
    withheld_tracers: tuple[str, ...] = Field(
        (), description="tracers never used in the inversion, kept to test it"
    )
    buoyancy: str | None = Field(None, description="buoyancy")
    temperature: str | None = Field(None, description="temperature, for the stratification")
    salinity: str | None = Field(None, description="salinity, for the stratification")
    total_fluxes: dict[str, tuple[str, str]] = Field(
        default_factory=dict,
        description="total fluxes along x and y by tracer, where the model averaged or summed "
        "them over its steps; velocities and tracers are then means over the same time",
    )
    potential_vorticity: str | None = Field(
        None, description="potential vorticity, for the active side of the diagnosis"
    )
    thickness: str | None = Field(
        None, description="layer thickness at each time, m, for the active side of the diagnosis"
    )


class GridLayout(Section):
    """Dimensions, faces and metric of the files, only where they do not tell."""

    x: str | None = Field(None, description="coordinate along x")
    y: str | None = Field(None, description="coordinate along y")
    layer: str | None = Field(None, description="vertical dimension")
    time: str | None = Field(None, description="time dimension")
    member: str | None = Field(None, description="member dimension, if members share a file")
    periodic: tuple[Literal["x", "y"], ...] | None = Field(None, description="periodic axes")
    faces: dict[
        Literal["x_velocity", "y_velocity", "z_velocity", "total_flux_x", "total_flux_y"], Face
    ] = Field(
        default_factory=dict,
        description="face of the cell on which a velocity or total flux sits; the centre if "
        "not named, and for fluxes where the velocity sits",
    )
    vertical: Literal["layers", "levels"] | None = Field(
        None, description="whether vertical cells move with the fluid or stand still"
    )
    top: Literal["first", "last"] | None = Field(
        None, description="which end of the vertical dimension is the surface"
    )
    layer_thickness: str | tuple[float, ...] | None = Field(
        None, description="variable or list of resting thicknesses, m"
    )
    reduced_gravity: str | tuple[float, ...] | None = Field(
        None, description="variable or list of reduced gravities at interfaces, m s-2"
    )
    sea_floor_depth: str | float | None = Field(
        None, description="variable or value of the depth of the sea floor, m"
    )
    coriolis: str | float | None = Field(
        None, description="variable or value at y = 0 of the Coriolis parameter, s-1"
    )
    beta: float | None = Field(
        None, description="northward gradient of the Coriolis parameter, m-1 s-1"
    )
    latitude: str | float | None = Field(
        None, description="variable or value of the latitude, degrees north"
    )
    potential_vorticity_gradient: float | tuple[float, ...] | None = Field(
        None, description="gradient along y that potential_vorticity leaves out, one or one a layer"
    )
    thickness_gradient: float | tuple[float, ...] | None = Field(
        None, description="gradient along y that thickness leaves out, one or one a layer, m per m"
    )
    dx: str | float | None = Field(None, description="variable or value of the cell width, m")
    dy: str | float | None = Field(None, description="variable or value of the cell width, m")

    @model_validator(mode="after")
    def _faces_fit(self) -> GridLayout:
        for part, face in self.faces.items():
            if face != "center" and (face in ("top", "bottom")) != (part == "z_velocity"):
                raise ValueError(f"{part} cannot sit on the {face} face of a cell")
        return self


class Seawater(Section):
    """How stratification follows from temperature and salinity."""

    equation: Literal["linear", "teos-10"] = Field("linear", description="equation of state")
    thermal_expansion: float | None = Field(
        None, gt=0, description="linear equation: thermal expansion coefficient, K-1"
    )
    haline_contraction: float = Field(
        0.0, ge=0, description="linear equation: haline contraction coefficient, kg g-1"
    )
    temperature_kind: Literal["conservative", "potential", "in-situ"] | None = Field(
        None, description="teos-10: which temperature the files hold"
    )


class EnsembleTable(Section):
    """One region: one ensemble with its own domain and regime."""

    name: str = Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_-]*$", description="name of the region")
    split: Literal["train", "test"] = Field("train", description="train on it or hold it out")
    files: str | tuple[str, ...] = Field(
        description="glob or list of NetCDF files, or a Zarr store, relative to the study"
    )
    variables: VariableNames = VariableNames()
    grid: GridLayout = GridLayout()
    seawater: Seawater | None = None

    @property
    def patterns(self) -> tuple[str, ...]:
        """The file patterns as a tuple."""
        return (self.files,) if isinstance(self.files, str) else self.files


class LayerSettings(Section):
    """Density layers that levels are remapped to, in each member and at each time."""

    quantity: str = Field(
        "potential-density",
        description="'potential-density', 'buoyancy', 'temperature' or a variable of the files",
    )
    reference_pressure: float | str = Field(
        2000.0, description="potential density: sea pressure in dbar, or with its unit as text"
    )
    edges: tuple[float, ...] = Field(
        (), description="values at the interfaces between layers; the end layers are open"
    )
    units: str | None = Field(None, description="units of the edges; SI if not given")
    count: int | None = Field(
        None, ge=2, le=200, description="number of layers of equal volume, in place of edges"
    )
    reconstruction: Literal["linear", "constant"] = Field(
        "linear", description="profiles between and within levels"
    )
    least_thickness: float = Field(
        1.0, gt=0, description="least mean thickness of a layer in a cell that counts as sea, m"
    )
    least_share: float = Field(
        0.5, gt=0, le=1, description="least share of members and times that have the layer there"
    )

    @model_validator(mode="after")
    def _one_choice(self) -> LayerSettings:
        if bool(self.edges) == (self.count is not None):
            raise ValueError("layers need either 'edges' or 'count'")
        steps = [after - before for before, after in pairwise(self.edges)]
        if not (all(step > 0 for step in steps) or all(step < 0 for step in steps)):
            raise ValueError("edges must grow or fall throughout")
        return self


class DiagnosisSettings(Section):
    """How eddy statistics and the transport tensor are computed."""

    eddies: Literal["ensemble", "ensemble-subgrid", "time"] = Field(
        "ensemble",
        description="eddies are departures from the ensemble mean, the same and what coarse "
        "cells hide, or departures from each member's time mean",
    )
    averaging: Literal["thickness-weighted", "reynolds"] | None = Field(
        None, description="averages; thickness-weighted by default on layers remapped to"
    )
    layers: LayerSettings | None = Field(
        None, description="density layers that levels are remapped to before averaging"
    )
    coarsen: int = Field(2, ge=1, le=64, description="cells per coarse cell along x and y")
    smoothing_length: float = Field(
        24.0e3, ge=0, description="length over which the tensor is kept smooth, m"
    )
    floor: float = Field(50.0, ge=0, description="lowest eigenvalue of the symmetric part, m2 s-1")
    floor_method: Literal["admm", "projection"] = Field(
        "admm", description="floor inside the fit or by projection after it"
    )
    scalar_pull: float | None = Field(
        None, ge=0, description="pull to the local scalar fit; by default only for few tracers"
    )
    ceiling_draws: int = Field(
        4,
        ge=0,
        le=1000,
        description="random pairs of halves for each number of members of the ceiling curves; "
        "0 for no curves",
    )
    flux: Literal["full", "divergent"] = Field(
        "full", description="invert the eddy fluxes or only their divergent parts"
    )
    rotational_weight: float = Field(
        0.0, ge=0, le=1, description="flux = 'divergent': share of the rotational part that stays"
    )
    gauge_boundary: GaugeBoundary = Field(
        "no-flux", description="what the divergent part of a flux holds at coasts"
    )
    relaxation_time: float | None = Field(
        None, gt=0, description="time in which anomalies of the tracers are relaxed away, s"
    )
    solver: Literal["auto", "direct", "iterative"] = Field(
        "auto", description="factorise the layers' systems or iterate; by size if auto"
    )
    form: Literal["local", "memory"] = Field(
        "local",
        description="fluxes from the mean gradient of the place, or (emerging) of where the "
        "water came from",
    )
    memory_time: float = Field(
        259_200.0, ge=0, description="memory form: time the flow remembers a gradient, s"
    )
    memory_length: float | None = Field(
        None,
        ge=0,
        description="memory form: length eddies blur a gradient over, m; by "
        "default 1.5 smoothing lengths, about a deformation radius",
    )
    leverage_tracers: tuple[str, ...] | None = Field(
        None, description="tracers whose leverage is wanted; by default the withheld ones"
    )

    @property
    def blurring_length(self) -> float:
        """Length of the memory form, m."""
        if self.memory_length is not None:
            return self.memory_length
        return RADIUS_OVER_SMOOTHING * self.smoothing_length

    @property
    def kept_rotational_weight(self) -> float:
        """Share of the rotational part of fluxes that is inverted."""
        return 1.0 if self.flux == "full" else self.rotational_weight


class FeatureSettings(Section):
    """What a closure sees of a point, and in which frame tensors and vectors are learned."""

    groups: tuple[FeatureGroup, ...] = Field(
        ("standard",),
        min_length=1,
        description="features taken together: standard, or all of a kind of physics",
    )
    frame: Frame = Field("pv-gradient", description="local frame")


class ClosureSettings(Section):
    """Which closures are trained and what binds them."""

    families: tuple[Family, ...] = Field(
        ("mean-field", "local-energy"), min_length=1, description="families by what a host gives"
    )
    regressors: tuple[Regressor, ...] = Field(
        ("ridge", "extra-trees", "histogram-boosting", "mlp", "trees-and-mlp"),
        min_length=1,
        description="candidates, chosen by leaving one region out",
    )
    targets: tuple[Target, ...] = Field(
        ("linear", "log-cholesky"), min_length=1, description="learnable form of the tensor"
    )
    floor: float = Field(50.0, gt=0, description="lowest eigenvalue of the symmetric part, m2 s-1")
    cap: float = Field(5.0e4, gt=0, description="highest eigenvalue of the symmetric part, m2 s-1")
    miscoverage: float = Field(
        0.1, gt=0, lt=0.5, description="share of cells a half-width may miss in a new region"
    )
    seed: int = Field(0, ge=0, description="seed of everything random in training")

    @model_validator(mode="after")
    def _ordered(self) -> ClosureSettings:
        if self.cap <= self.floor:
            raise ValueError("cap must lie above floor")
        return self


class ValidationSettings(Section):
    """How closures are scored."""

    folds: int = Field(4, ge=2, le=20, description="folds of the random and blocked splits")
    block_cells: int = Field(
        8, ge=1, description="side of a spatial block, coarse cells; less in small regions"
    )
    baselines: tuple[BaselineName, ...] = Field(
        get_args(BaselineName), description="classical closures scored beside the learned ones"
    )


class ExportSettings(Section):
    """What the bundle says of itself."""

    version: str = Field("0.1.0", pattern=r"^\d+\.\d+\.\d+$", description="version of the bundle")
    licence: str = Field("CC-BY-4.0", description="SPDX expression for the bundle")
    citation: str = Field(
        "", max_length=2000, description="how to cite the bundle; by name and version if empty"
    )
    single_precision: bool = Field(
        True, description="ship a variant whose regressor computes in single precision"
    )
    reference_points: int = Field(
        256, ge=8, le=100_000, description="points whose inputs and outputs ship for checking"
    )

    @field_validator("licence")
    @classmethod
    def _spdx(cls, text: str) -> str:
        try:
            return str(canonicalize_license_expression(text))
        except InvalidLicenseExpression:
            raise ValueError("is no SPDX licence expression, such as CC-BY-4.0") from None


class Study(Section):
    """A whole study.

    Examples
    --------
    >>> text = '''
    ... output = "results"
    ... [[ensemble]]
    ... name = "north"
    ... files = "north/*.nc"
    ... '''
    >>> parse_study(text).ensembles[0].name
    'north'
    """

    output: Path = Field(Path("results"), description="folder for all artefacts")
    ensembles: tuple[EnsembleTable, ...] = Field(
        alias="ensemble", min_length=1, description="one table per region"
    )
    diagnosis: DiagnosisSettings = DiagnosisSettings()
    features: FeatureSettings = FeatureSettings()
    closure: ClosureSettings = ClosureSettings()
    validation: ValidationSettings = ValidationSettings()
    export: ExportSettings = ExportSettings()
    folder: Annotated[Path, Field(exclude=True, description="folder of the study file")] = Path()

    @model_validator(mode="after")
    def _distinct_names(self) -> Study:
        names = [table.name for table in self.ensembles]
        if len(set(names)) != len(names):
            raise ValueError("two ensembles share one name")
        if all(table.split == "test" for table in self.ensembles):
            raise ValueError("at least one ensemble must have split = 'train'")
        return self

    @property
    def output_folder(self) -> Path:
        """Folder of the artefacts, relative paths taken from the study's folder."""
        return self.output if self.output.is_absolute() else self.folder / self.output


def _first_problem(error: ValidationError) -> tuple[str, str, object]:
    problem = error.errors()[0]
    key = ".".join(str(part) for part in problem["loc"])
    if problem["type"] == "extra_forbidden":
        return key, "unknown key", None
    message = problem["msg"].removeprefix("Value error, ")
    return key, message, problem.get("input")


def parse_study(text: str, *, where: str = "study", folder: Path | None = None) -> Study:
    """Read a study from TOML text.

    Parameters
    ----------
    text : str
        The TOML document.
    where : str, optional
        Name used in error messages.
    folder : Path, optional
        Folder that relative paths start from; the working folder if not given.

    Returns
    -------
    Study

    Raises
    ------
    StudyError
        If the text is not TOML, has an unknown key or a value that is not allowed.
    """
    try:
        tables = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise StudyError(
            f"not a TOML document: {error}", where=where, remedy="correct the line it names"
        ) from None
    if "folder" in tables:
        raise StudyError("unknown key", where=f"{where}: folder", remedy="remove it")
    try:
        return Study.model_validate({**tables, "folder": folder or Path()})
    except ValidationError as error:
        key, message, found = _first_problem(error)
        plain = found if isinstance(found, (str, int, float, bool)) else None
        raise StudyError(
            message,
            where=f"{where}: {key}" if key else where,
            found=repr(plain) if plain is not None else None,
            remedy="see 'learnclosure inspect --help' and the keys listed in the README",
        ) from None


def read_study(path: str | Path) -> Study:
    """Read a study file.

    Parameters
    ----------
    path : str or Path
        A TOML file.

    Returns
    -------
    Study

    Raises
    ------
    StudyError
        If the file cannot be read or is not a study.
    """
    file = Path(path)
    try:
        text = file.read_text(encoding="utf-8")
    except OSError as error:
        raise StudyError(
            f"cannot be read: {error.strerror}", where=file, remedy="give the path of a study file"
        ) from None
    except UnicodeDecodeError:
        raise StudyError(
            "is not a UTF-8 text file", where=file, remedy="give the path of a study file"
        ) from None
    return parse_study(text, where=str(file), folder=file.parent)
