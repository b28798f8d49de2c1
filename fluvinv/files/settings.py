"""The settings as a tree of frozen data classes: every key with its default, unit, limits and meaning."""

import os
import warnings
from pathlib import Path
from typing import Annotated, Any, Literal

import pyproj
from pydantic import (
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    PrivateAttr,
    ValidationInfo,
    field_validator,
    model_serializer,
    model_validator,
)

from fluvinv import units
from fluvinv.files.settings_keys import NOT_YET, done_so_far, key, problem, shown


def _text(value: Any) -> Any:
    """Refuse text that no file system call or library could take."""
    if isinstance(value, str):
        try:
            encoded = os.fsencode(value)
        except UnicodeEncodeError:
            encoded = b"\0"
        if not value.strip() or b"\0" in encoded:
            raise problem(f"found {shown(value)}, expected text with no unwritable characters.")
    return value


def _beside_the_settings(value: Any, info: ValidationInfo) -> Any:
    """Paths of inputs are relative to the folder of the settings file."""
    if isinstance(value, str):
        return info.context["folder"] / _text(value)
    return value


Text = Annotated[str, BeforeValidator(_text)]
InputPath = Annotated[Path, BeforeValidator(_beside_the_settings)]
LaterKey = done_so_far(Any, None)


def auto_or(least: float, most: float) -> Any:
    """Type of a key that is left to the program or is a number within limits that no sound run goes beyond."""
    return Literal["auto"] | Annotated[float, Field(ge=least, le=most)]


def plain_name(text: str) -> str:
    """Turn any text into one that can be part of a file name on its own."""
    safe = "".join(c if c.isprintable() and c not in "/\\" else "_" for c in text)
    return safe[:100].strip() or "catchment"


class _Section(BaseModel):
    """One mapping of the settings file. Strict: text is never read as a number, nor true as 1."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)

    @model_validator(mode="before")
    @classmethod
    def _empty_means_defaults(cls, value: Any) -> Any:
        # A section whose lines are all commented out reads as null.
        return {} if value is None else value


class Catchment(_Section):
    """Where the heights come from and what base level is."""

    name: Text = Field(
        None,
        description="name of the run, used for the results folder and in titles",
        validate_default=True,
    )
    dem: InputPath = key(..., "digital elevation model, a raster; relative to the folder of this file")
    base_level_m: float = key(
        0.0, "height of base level; cells at or below it that reach the edge are sea", "m", ge=-12000, le=9000
    )
    nodata: Literal["auto", "sea", "void"] = key(
        "auto", "cells without data: sea, void (unknown land), or auto to tell by their setting"
    )
    projection: Text = key(
        "auto", "CRS of the map grid, projected, in metres; auto: the DEM's own, else an equal-area one around it"
    )
    base_level_polygon: LaterKey = key(None, "polygon within which base level lies")
    flow_directions: LaterKey = key(None, "raster of ready-made flow directions")

    @field_validator("name", mode="before")
    @classmethod
    def _name_of_the_file(cls, value: Any, info: ValidationInfo) -> Any:
        if value is None:
            return plain_name(info.context["stem"])
        if isinstance(value, str) and value != plain_name(value):
            raise problem(f"found {shown(value)}, expected a name of at most 100 characters without slashes.")
        return value

    @field_validator("projection")
    @classmethod
    def _projected_in_metres(cls, value: str) -> str:
        if value == "auto":
            return value
        expected = "expected 'auto' or a projected CRS in metres, such as EPSG:32633"
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")  # old spellings of a CRS are accepted without remark
                crs = pyproj.CRS.from_user_input(value)
        except pyproj.exceptions.CRSError:
            raise problem(f"found {shown(value)}, which names no known CRS; {expected}.") from None
        if not crs.is_projected:
            raise problem(f"found {shown(value)}, a CRS that is not projected; {expected}.")
        unit = crs.axis_info[0].unit_name
        if unit not in ("metre", "meter", "m"):
            raise problem(f"found {shown(value)}, a CRS in {unit}; {expected}.")
        return value


class Terrain(_Section):
    """How the DEM becomes a river network."""

    engine: done_so_far(Literal["pyflwdir", "richdem"], "pyflwdir") = key("pyflwdir", "library that routes the flow")
    depressions: Literal["carve", "fill"] = key(
        "carve", "closed hollows are passed by carving their rim or by filling them; for routing only"
    )
    channel_area_km2: auto_or(1e-6, 1e7) = key("auto", "upstream area at which a channel begins", "km2")
    incomplete: Literal["drop", "keep", "complete"] = key(
        "drop",
        "rivers whose area is cut by the DEM's edge: drop, keep (with a warning), or complete (cut along the divide)",
    )


class StreamPower(_Section):
    """Numbers of the stream-power law dz/dt = U - K A^m S^n."""

    erodibility: float | None = key(
        None,
        "erodibility K; scales all rates and ages; heights alone cannot tell it",
        "m^(1-2m)/yr",
        "usually 1e-7 to 1e-4 at area exponent 0.5",
        ge=1e-12,
        le=1,
    )
    reference_celerity_m_per_yr: float | None = key(
        None,
        "instead of erodibility: speed at which signals travel upstream where the area is reference_area_km2",
        "m/yr",
        "usually 1e-3 to 1",
        ge=1e-8,
        le=1e4,
    )
    reference_area_km2: float = key(
        100.0, "upstream area at which reference_celerity_m_per_yr holds", "km2", ge=1e-6, le=1e7
    )
    area_exponent: float = key(0.5, "area exponent m; with n = 1 also the concavity", gt=0, lt=1.5)
    slope_exponent: done_so_far(Annotated[float, Field(gt=0)], 1) = key(1.0, "slope exponent n")
    erodibility_map: LaterKey = key(None, "raster of erodibility")
    rainfall_map: LaterKey = key(None, "raster of rainfall that weights the area")
    base_level_history: LaterKey = key(None, "table of base-level heights against age")

    @model_validator(mode="after")
    def _one_of_two(self) -> "StreamPower":
        given = [self.erodibility, self.reference_celerity_m_per_yr].count(None)
        if given != 1:
            found = "neither" if given == 2 else "both"
            raise problem(f"found {found}, expected one of erodibility and reference_celerity_m_per_yr.")
        return self

    @property
    def erodibility_si(self) -> float:
        """Erodibility K in m^(1-2m)/yr; from the celerity c at area A, K = c / A^m."""
        if self.erodibility is not None:
            return self.erodibility
        area = units.km2_to_m2(self.reference_area_km2)
        return self.reference_celerity_m_per_yr / area**self.area_exponent


class UpliftGrid(_Section):
    """The map nodes and ages at which uplift rate is sought."""

    spacing_km: auto_or(1e-3, 1e4) = key("auto", "distance between map nodes", "km")
    step_myr: auto_or(1e-6, 5000) = key("auto", "time between age nodes", "Myr")
    duration_myr: auto_or(1e-6, 5000) = key(
        "auto", "oldest age; auto: the travel time that 99 % of river nodes stay below", "Myr"
    )


class Noise(_Section):
    """Misfit that is not uplift. `height_m` is None when it is estimated from the misfit."""

    height_m: float | None = key(None, "standard deviation of white height error", "m", ge=1e-3, le=1e4)
    walk_m_per_sqrt_km: done_so_far(Annotated[float, Field(ge=0)], 0) = key(
        0.0, "random walk along the river", "m per square root of km"
    )
    walk_gain_sqrt_km: done_so_far(Annotated[float, Field(ge=0)], 0) = key(
        0.0, "random walk that grows with the gain in height", "square root of km"
    )

    @model_validator(mode="before")
    @classmethod
    def _short_form(cls, value: Any) -> Any:
        expected = "expected 'white' or a mapping such as {height_m: 10}"
        if value == "white":
            return {}
        if value == "estimated":
            raise problem(f"'estimated' is {NOT_YET}; {expected}.")
        if not isinstance(value, dict):
            raise problem(f"found {shown(value)}, {expected}.")
        if value.get("height_m") is None and set(value) <= set(cls.model_fields):
            raise problem(f"found no height_m, {expected}.")
        return value

    @model_serializer(mode="wrap")
    def _as_in_the_file(self, handler: Any) -> Any:
        return "white" if self.height_m is None else handler(self)


class Damping(_Section):
    """The prior on uplift rate: a smooth random field with three numbers, and how they are chosen."""

    choose: done_so_far(Literal["l-curve", "fixed", "evidence", "held-out"], "l-curve", "fixed") = key(
        "l-curve", "how damping is chosen: l-curve, or fixed with spread_mm_per_yr given"
    )
    range_km: auto_or(1e-3, 1e6) = key("auto", "distance over which rates are alike", "km")
    range_myr: auto_or(1e-6, 1e6) = key("auto", "time over which rates are alike", "Myr")
    spread_mm_per_yr: auto_or(1e-6, 1e4) = Field(
        "auto",
        description="standard deviation of rates about their mean; auto with l-curve, a number with fixed",
        json_schema_extra={"unit": "mm/yr"},
        validate_default=True,
    )

    @field_validator("spread_mm_per_yr")
    @classmethod
    def _goes_with_choose(cls, value: Any, info: ValidationInfo) -> Any:
        choose = info.data.get("choose")
        if choose == "fixed" and value == "auto":
            raise problem("found 'auto' with 'choose: fixed', expected a number above 0 (mm/yr).")
        if choose == "l-curve" and value != "auto":
            raise problem(
                f"found {shown(value)} with 'choose: l-curve', which finds this number itself;\n"
                "expected 'auto', or 'choose: fixed'."
            )
        return value


class Rock(_Section):
    """Unknown erodibility as a field of its own."""

    spread: done_so_far(Literal["estimated"] | Annotated[float, Field(ge=0)], 0) = key(
        0.0, "spread of unknown ln K from place to place; 0: none"
    )
    range_km: done_so_far(auto_or(1e-3, 1e6), "auto") = key(
        "auto", "distance over which unknown rock is alike; without effect at spread 0", "km"
    )


class Inversion(_Section):
    """What the solver is told about noise and about the history it seeks."""

    noise: Noise = Field(
        Noise.model_construct(),
        description=(
            "misfit that is not uplift; white: one height error, estimated; or {height_m: NUMBER} to state it in m"
        ),
    )
    damping: Damping = Damping()
    rock: Rock = Rock()
    allow_subsidence: bool = key(True, "whether rates may be negative; false holds them at or above zero")
    seed: int = key(1, "seed of whatever is drawn at random", ge=0, le=2**32 - 1)


class Output(_Section):
    """Where the results go."""

    directory: Text | None = key(
        None, "results folder, relative to the folder the program is run in; empty: NAME_uplift"
    )
    report: done_so_far(bool, False) = key(False, "write report.html")
    compare_with: InputPath | None = key(
        None, "uplift stack (GeoTIFF) of a known history to compare the result with; for invented landscapes"
    )


class Settings(_Section):
    """All settings of a run. Made by `fluvinv.files.settings_file.read_settings`."""

    catchment: Catchment = Field(None, validate_default=True)
    terrain: Terrain = Terrain()
    stream_power: StreamPower = Field(None, validate_default=True)
    uplift_grid: UpliftGrid = UpliftGrid()
    inversion: Inversion = Inversion()
    markers: LaterKey = key(None, "table of dated markers")
    regions: LaterKey = key(None, "polygons over which rates are averaged")
    sweep: LaterKey = key(None, "settings to vary from run to run")
    output: Output = Output()

    #: Paths by dotted key, in their author's words, so that the record holds no path of this machine.
    _paths_as_written: dict[str, str] = PrivateAttr(default_factory=dict)

    @property
    def results_directory(self) -> Path:
        """Results folder; when relative, relative to the working folder."""
        return Path(self.output.directory or f"{self.catchment.name}_uplift")


def build_settings(values: dict, folder: Path, stem: str) -> Settings:
    """Check a tree of plain values and make it `Settings`.

    Parameters
    ----------
    values : dict
        Nested dicts as read from a settings file.
    folder : Path
        Absolute folder against which input paths are resolved.
    stem : str
        Name of the run where none is given.

    Raises
    ------
    pydantic.ValidationError
        With one entry per finding; `fluvinv.files.settings_file` turns them into one `SettingsError`.
    """
    settings = Settings.model_validate(values, context={"folder": folder, "stem": stem})
    settings._paths_as_written["catchment.dem"] = values["catchment"]["dem"]
    if settings.output.compare_with is not None:
        settings._paths_as_written["output.compare_with"] = values["output"]["compare_with"]
    return settings


def settings_record(settings: Settings, relative_to: Path | None = None) -> dict:
    """All settings with defaults filled in, ready for JSON.

    Parameters
    ----------
    settings : Settings
    relative_to : Path, optional
        Give paths of inputs relative to this folder; without it they stand as their author wrote them.
    """
    record = settings.model_dump(mode="json")
    for dotted, written in settings._paths_as_written.items():
        section, key = dotted.split(".")
        path = getattr(getattr(settings, section), key)
        record[section][key] = written if relative_to is None else os.path.relpath(path, relative_to)
    return record
