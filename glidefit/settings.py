"""Settings, each declared once: the option, the TOML key, the check and the page follow from it."""

from __future__ import annotations

import difflib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Literal, get_args, get_origin

from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator

from glidefit import fit_parameters
from glidefit.errors import InputError, InputErrors


def setting(default: Any, unit: str, help: str, **limits: Any) -> Any:
    """Declare a setting: default, unit ("" for a pure number), one sentence of help, limits."""
    return Field(default, description=help, json_schema_extra={"unit": unit}, **limits)


class _Section(BaseModel):
    model_config = ConfigDict(
        extra="forbid",
        frozen=True,
        allow_inf_nan=False,
        strict=True,
        str_min_length=1,
        defer_build=True,  # the help of a command needs the declarations alone, and soon
    )


class ColumnSettings(_Section):
    """What the columns of a track table are called, where they have other names."""

    track: str = setting("track", "", "Column of a track table that names the track.")
    frame: str = setting("frame", "", "Column that counts frames.")
    time_s: str = setting("time_s", "", "Column of times in s, if there is one.")
    x_um: str = setting("x_um", "", "Column of x in µm.")
    y_um: str = setting("y_um", "", "Column of y in µm.")
    x_px: str = setting("x_px", "", "Column of x in pixels, converted with the sheet's pixel_um.")
    y_px: str = setting("y_px", "", "Column of y in pixels.")
    heading_rad: str = setting("heading_rad", "", "Column of the body's direction in rad.")
    length_um: str = setting("length_um", "", "Column of the contour length in µm.")
    flag: str = setting(
        "flag", "", "Column that says why a position is not to be trusted; empty for one that is."
    )


class DetectSettings(_Section):
    """How spots and filaments are found in a frame."""

    threshold: float = setting(
        5.0,
        "× noise",
        "How far a spot or filament must stand out of the noise of the filtered frame; raised a "
        "little for spots in large frames and in the dark, so that empty frames stay empty.",
        gt=0,
    )
    spot_diameter: float = setting(
        0.9,
        "µm",
        "Width of the picture of one spot, or across a filament, out to where it fades.",
        gt=0,
    )
    contrast: Literal["bright", "dark"] = setting(
        "bright", "", "Whether the tracers are brighter or darker than the background."
    )


class LinkSettings(_Section):
    """How positions of successive frames are joined into tracks."""

    max_speed: float = setting(12.0, "µm/s", "Fastest gliding still believed.", gt=0)
    max_gap: int = setting(2, "frames", "Longest absence bridged inside a track.", ge=0)


class CleanSettings(_Section):
    """Which tracks are set aside, and whether stage drift is taken out."""

    stuck: float = setting(
        2.0,
        "× noise",
        "What does not glide and strays no farther than this from its mean is stuck.",
        ge=1,
    )
    odds: float = setting(
        3.0,
        ": 1",
        "Odds from which it is told whether a track glides; others do not count as motile or not.",
        ge=1,
    )
    pivot_extent: float = setting(
        5.0, "µm", "Largest extent of a filament that pivots in place.", gt=0
    )
    jump: float = setting(
        5.0, "× typical step", "A step longer than this, and out of the noise, is a jump.", gt=1
    )
    drift: Literal["auto", "off"] = setting(
        "auto", "", "Subtract stage drift seen in stuck objects when it is significant, or never."
    )
    drift_objects: int = setting(
        3, "objects", "Fewest stuck objects from which drift is measured.", ge=2
    )


class FitSettings(_Section):
    """How the active-Brownian model is fitted."""

    method: Literal["likelihood", "msd"] = setting(
        "likelihood",
        "",
        "What the numbers come from; the mean squared displacement stands beside the likelihood.",
    )
    model: Literal["auto", "active", "circling", "pausing", "passive"] = setting(
        "auto",
        "",
        "Whether paths turn steadily, filaments pause, or nothing drives them; chosen by practical "
        "size and at the level of chambers.",
    )
    clock: Literal["per_path", "per_time"] = setting(
        "per_path",
        "",
        "Whether the heading diffuses with the path travelled, as where the free tip lays it, or "
        "with time.",
    )
    parameters: str | None = setting(
        None,
        "",
        "Parameters of the likelihood that are known (name = value), bounded (low < name < high) "
        "or freed (sideways_diffusion_um2_s = free), separated by commas.",
    )
    bend: float = setting(
        0.15,
        "rad²",
        "The longest lag is the one over which D_r t reaches this, as far as the data allow.",
        gt=0,
        le=2,
    )
    longest_lag: float | None = setting(
        None, "s", "Longest lag of the fit; chosen from the data if not given.", gt=0
    )
    unknown_exposure: float = setting(
        1.0,
        "× frame interval",
        "Exposure that is assumed where neither sheet nor file tells it.",
        ge=0,
        le=1,
    )
    field_width: float | None = setting(
        None,
        "µm",
        "Width of the field for track tables; the extent of the tracks if not given.",
        gt=0,
    )
    field_height: float | None = setting(
        None, "µm", "Height of the field for track tables, likewise.", gt=0
    )

    @field_validator("parameters")
    @classmethod
    def _readable(cls, text: str | None) -> str | None:
        if text is not None:
            fit_parameters.parse(text)
        return text

    @property
    def known(self) -> fit_parameters.FitParameters:
        """What ``parameters`` says."""
        if self.parameters is None:
            return fit_parameters.FitParameters()
        return fit_parameters.parse(self.parameters)


class IntervalSettings(_Section):
    """How intervals are made."""

    level: float = setting(0.95, "", "Confidence level of the intervals.", gt=0.5, lt=1)
    resamples: int = setting(2000, "", "Bootstrap resamples.", ge=200, le=100_000)


class CompareSettings(_Section):
    """Which conditions are compared, and what is tested first."""

    reference: str = setting(
        "control",
        "",
        "What conditions are compared with: the control, one condition by its name, or each with "
        "each (all).",
    )
    primary: Literal[
        "speed_um_s", "rotational_diffusion_rad2_s", "persistence_length_um", "motile_fraction"
    ] = setting(
        "speed_um_s",
        "",
        "The quantity whose p values are adjusted for the number of comparisons; the others are "
        "secondary.",
    )
    margin: float = setting(
        0.1,
        "",
        "Two conditions count as alike within this share when the 90 % interval says so.",
        gt=0,
        lt=1,
    )


class ResponseSettings(_Section):
    """Curves of speed against a column of numbers of the assay sheet."""

    column: str | None = setting(
        None,
        "",
        "Column of the assay sheet to draw against; if not given, every one with three values or "
        "more.",
    )
    model: Literal[
        "auto", "michaelis-menten", "hill", "competitive", "arrhenius", "saturation", "linear"
    ] = setting("auto", "", "The curve; auto compares those that suit the unit of the column.")
    inhibitor: str | None = setting(
        None, "", "Column with the concentration of a competitive inhibitor, for that curve."
    )
    series: str | None = setting(
        None, "", "Column of labels that parts the conditions into series, each with its own curve."
    )
    scatter: Literal["relative", "constant"] = setting(
        "relative",
        "",
        "Whether points scatter about the curve by a share of it, or alike everywhere.",
    )


class PageSettings(_Section):
    """What the pages show."""

    drawn_tracks: int = setting(
        300, "tracks", "Most tracks drawn in the plane on a condition's page.", ge=10, le=5000
    )


class Settings(_Section):
    """All settings, in sections."""

    columns: ColumnSettings = Field(default_factory=ColumnSettings)
    detect: DetectSettings = Field(default_factory=DetectSettings)
    link: LinkSettings = Field(default_factory=LinkSettings)
    clean: CleanSettings = Field(default_factory=CleanSettings)
    fit: FitSettings = Field(default_factory=FitSettings)
    interval: IntervalSettings = Field(default_factory=IntervalSettings)
    compare: CompareSettings = Field(default_factory=CompareSettings)
    response: ResponseSettings = Field(default_factory=ResponseSettings)
    page: PageSettings = Field(default_factory=PageSettings)


@dataclass(frozen=True, slots=True, kw_only=True)
class Declaration:
    """One setting as it was declared."""

    section: str
    name: str
    kind: type  # float, int or str
    choices: tuple[str, ...]
    default: Any  # None if it is chosen from the data
    unit: str
    help: str

    @property
    def key(self) -> str:
        """As in a settings file and on the page: "link.max_speed"."""
        return f"{self.section}.{self.name}"

    @property
    def option(self) -> str:
        """As on the command line: "--link-max-speed"."""
        return f"--{self.section}-{self.name}".replace("_", "-")

    @property
    def parameter(self) -> str:
        """As the name of an argument: "link_max_speed"."""
        return f"{self.section}_{self.name}"


def declarations() -> Iterator[Declaration]:
    """All settings in the order of their declaration."""
    for section, holder in Settings.model_fields.items():
        kind = holder.annotation
        assert isinstance(kind, type)
        assert issubclass(kind, BaseModel)
        for name, field in kind.model_fields.items():
            yield _declaration(section, name, field)


def _declaration(section: str, name: str, field: Any) -> Declaration:
    choices: tuple[str, ...] = ()
    kind: Any = field.annotation
    if get_origin(kind) is Literal:
        kind, choices = str, get_args(kind)
    elif not isinstance(kind, type):  # float | None
        kind = next(k for k in get_args(kind) if k is not type(None))
    return Declaration(
        section=section,
        name=name,
        kind=kind,
        choices=choices,
        default=field.default,
        unit=field.json_schema_extra["unit"],
        help=field.description,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class SourcedSettings:
    """Settings, and for each that was given where it came from ("file" or "option")."""

    values: Settings
    sources: Mapping[str, str]  # "link.max_speed": "file"

    def source(self, key: str) -> str:
        """Source of the setting with this key."""
        return self.sources.get(key, "default")


def resolve(
    *,
    file: Mapping[str, Any] | None = None,
    file_name: str = "settings file",
    options: Mapping[str, Any] | None = None,
) -> SourcedSettings:
    """Settings from a parsed settings file and from options by key; an option wins.

    Parameters
    ----------
    file : mapping, optional
        Sections of mappings, as TOML gives them.
    file_name : str
        Named in errors.
    options : mapping, optional
        "link.max_speed": value.

    Raises
    ------
    InputErrors
        Unknown keys (with the nearest known one), wrong kinds, values out of limits; all at once.
    """
    known = {d.key: d for d in declarations()}
    given: dict[str, Any] = {}
    sources: dict[str, str] = {}
    errors: list[InputError] = []
    for section, content in (file or {}).items():
        if not isinstance(content, Mapping) or section not in Settings.model_fields:
            errors.append(_misplaced(file_name, section, content, known))
            continue
        for name, value in content.items():
            key = f"{section}.{name}"
            if key not in known:
                errors.append(_unknown(file_name, key, list(known)))
            else:
                given[key], sources[key] = value, "file"
    for key, value in (options or {}).items():
        given[key], sources[key] = value, "option"
    nested: dict[str, dict[str, Any]] = {}
    for key, value in given.items():
        section, name = key.split(".", 1)
        nested.setdefault(section, {})[name] = value
    try:
        values = Settings.model_validate(nested)
    except ValidationError as error:
        errors += [_invalid(file_name, known, sources, e) for e in error.errors(include_url=False)]
    if errors:
        raise InputErrors(errors)
    return SourcedSettings(values=values, sources=sources)


def _misplaced(
    file_name: str, name: str, content: Any, known: Mapping[str, Declaration]
) -> InputError:
    """A section that is none, or a setting that stands in none."""
    if name in Settings.model_fields:
        return InputError(
            file_name,
            f"{name!r} is {content!r}",
            expected="a section with settings",
            remedy=f"Write [{name}] on a line of its own and its settings below.",
        )
    if sections := [d.section for d in known.values() if d.name == name]:
        return InputError(
            file_name,
            f"{name!r} stands in no section",
            expected="every setting in its section",
            remedy=f"Put it below [{sections[0]}].",
        )
    return _unknown(file_name, name, sorted(Settings.model_fields))


def _unknown(file_name: str, key: str, known: list[str]) -> InputError:
    near = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
    hint = f"Did you mean {near[0]!r}?" if near else "README.md lists all settings."
    return InputError(file_name, f"{key!r} is no setting", expected="a known setting", remedy=hint)


# What the validating library says in words of its own.
_PLAIN = {
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "string_too_short": "a name",
}


def _invalid(
    file_name: str, known: Mapping[str, Declaration], sources: Mapping[str, str], error: Any
) -> InputError:
    key = ".".join(str(part) for part in error["loc"][:2])
    declared = known[key]
    where = f"option {declared.option}" if sources[key] == "option" else f"{file_name}, {key}"
    message = _PLAIN.get(error["type"]) or error["msg"].removeprefix("Input should be ")
    message = message.replace("'", "")
    unit = f" ({declared.unit})" if declared.unit else ""
    if error["type"] == "value_error":  # from one of our own checks
        return InputError(
            where, f"{error['ctx']['error']}", expected="parameters", remedy=declared.help
        )
    default = "chosen from the data" if declared.default is None else f"{declared.default}"
    return InputError(
        where,
        f"the value is {error['input']!r}",
        expected=f"a value {message}{unit}" if "than" in message else f"{message}{unit}",
        remedy=f"The default is {default}.",
    )
