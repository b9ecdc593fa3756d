"""Recipes: what to simulate and how it is filmed, from TOML."""

from __future__ import annotations

import dataclasses
import difflib
import math
import types
import typing
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from glidefit.errors import InputError, InputErrors
from glidefit.kernels.filament_optics import FilamentOptics, FilmFaults
from glidefit.kernels.filament_population import FilamentLaw
from glidefit.kernels.synthetic_frames import CameraFaults
from glidefit.steps.simulate import Scenario, ScenarioCondition


@dataclass(frozen=True, slots=True, kw_only=True)
class Video:
    """How the spot videos of a part look; left out, the part gives track tables."""

    signal_to_noise: float = 6.0
    psf_um: float = 0.15
    background_photons: float = 20.0
    read_noise: float = 2.0
    faults: CameraFaults = dataclasses.field(default_factory=CameraFaults)

    def __post_init__(self) -> None:
        if not (self.signal_to_noise > 0 and self.psf_um > 0):
            raise ValueError("signal_to_noise and psf_um must be > 0")
        if min(self.background_photons, self.read_noise) < 0:
            raise ValueError("background_photons and read_noise must be >= 0")


@dataclass(frozen=True, slots=True, kw_only=True)
class FilamentFilming:
    """What the filaments of a part are like and how their videos look."""

    signal_to_noise: float = 4.0  # peak of a filament over the noise there
    psf_um: float = 0.13
    background_photons: float = 20.0
    read_noise: float = 1.6
    labels_per_um: float = 60.0  # fluorophores that shine; 0 is even labelling
    length_um: float = 8.0  # mean
    length_spread: float = 0.5  # SD of the logarithm
    bundled_share: float = 0.0  # of the gliding filaments
    detach_rate_per_s: float = 0.0  # as many land
    faults: FilmFaults = dataclasses.field(default_factory=FilmFaults)

    def __post_init__(self) -> None:
        if not (self.signal_to_noise > 0 and self.psf_um > 0):
            raise ValueError("signal_to_noise and psf_um must be > 0")
        _ = self.law, self.optics(1.0)  # their own checks

    @property
    def law(self) -> FilamentLaw:
        """What the filaments are like; how many there are is the scenario's."""
        return FilamentLaw(
            length_um=self.length_um,
            length_spread=self.length_spread,
            bundled_share=self.bundled_share,
            detach_rate=self.detach_rate_per_s,
        )

    def optics(self, pixel_um: float) -> FilamentOptics:
        """How they look to a camera."""
        return FilamentOptics.with_signal_to_noise(
            self.signal_to_noise,
            psf_um=self.psf_um,
            pixel_um=pixel_um,
            background_photons=self.background_photons,
            read_noise=self.read_noise,
            labels_per_um=self.labels_per_um,
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """One scenario of a recipe and how it is filmed."""

    scenario: Scenario
    video: Video | None = None
    filament_video: FilamentFilming | None = None
    chamber_prefix: str = "c"  # of chamber labels, so that parts filmed on one day stay apart

    def __post_init__(self) -> None:
        if self.scenario.seed < 0:
            raise ValueError("seed must be >= 0")
        if self.video is not None and self.filament_video is not None:
            raise ValueError("a part has a video (of spots) or a filament_video, not both")
        others = self.scenario.pivoting_fraction + self.scenario.detached_fraction
        if self.filament_video is not None and others > 0:
            raise ValueError(
                "pivoting_fraction and detached_fraction must be 0 with a filament_video"
            )


def read_recipe(path: Path) -> tuple[Part, ...]:
    """Parts of a recipe: TOML with one ``[[part]]`` a scenario.

    Raises
    ------
    InputErrors
        All that is wrong: unknown keys (with the nearest known one), wrong kinds, impossible
        values.
    """
    from glidefit.reading.settings_file import read_settings

    data = read_settings(path, expected="a recipe in TOML")
    parts = data.pop("part", None)
    errors = [_unknown(path.name, key, ["part"]) for key in data]
    if not isinstance(parts, list) or not parts:
        errors.append(
            InputError(
                path.name,
                "it has no [[part]]",
                expected="a recipe: one [[part]] for each scenario",
                remedy="Start from the recipe of the example.",
            )
        )
        raise InputErrors(errors)
    made = [_part(part, f"{path.name}, part {i + 1}", errors) for i, part in enumerate(parts)]
    if errors:
        raise InputErrors(errors)
    return tuple(part for part in made if part is not None)


def _part(data: Any, where: str, errors: list[InputError]) -> Part | None:
    """One part; what is wrong goes into ``errors``, and None comes back."""
    data = dict(data) if isinstance(data, Mapping) else data
    values: dict[str, Any] = {}
    if isinstance(data, dict):
        for key, kind in (("video", Video), ("filament_video", FilamentFilming)):
            if key in data:
                values[key] = _record(kind, data.pop(key), f"{where}, {key}", errors)
        if "chamber_prefix" in data:
            prefix = data.pop("chamber_prefix")
            values["chamber_prefix"] = _value(str, prefix, f"{where}, chamber_prefix", errors)
    scenario = _record(Scenario, data, where, errors)
    if scenario is None:
        return None
    part: Part | None = _made(Part, {"scenario": scenario, **values}, where, errors)
    return part


def _unknown(where: str, key: str, known: list[str]) -> InputError:
    near = difflib.get_close_matches(key, known, n=1, cutoff=0.5)
    return InputError(
        where,
        f"{key!r} is no key of a recipe",
        expected="a known key",
        remedy=f"Did you mean {near[0]!r}?" if near else f"The keys here are {', '.join(known)}.",
    )


def _record(kind: type[Any], data: Any, where: str, errors: list[InputError]) -> Any:
    """A record from a TOML table; what is wrong goes into ``errors``, and None comes back."""
    if not isinstance(data, Mapping):
        errors.append(
            InputError(where, f"{data!r}", expected="a table of keys", remedy="See the example.")
        )
        return None
    hints = typing.get_type_hints(kind)
    known = [f.name for f in dataclasses.fields(kind)]
    before = len(errors)
    values: dict[str, Any] = {}
    for key, value in data.items():
        if key not in known:
            errors.append(_unknown(where, key, known))
        elif key == "conditions":
            items = value if isinstance(value, list) else [value]
            values[key] = tuple(
                _record(ScenarioCondition, item, f"{where}, condition {n + 1}", errors)
                for n, item in enumerate(items)
            )
        elif key == "columns" and kind is ScenarioCondition:
            values[key] = _columns(value, f"{where}, columns", errors)
        elif dataclasses.is_dataclass(hints[key]):
            values[key] = _record(hints[key], value, f"{where}.{key}", errors)
        else:
            values[key] = _value(hints[key], value, f"{where}, {key}", errors)
    return _made(kind, values, where, errors) if len(errors) == before else None


def _columns(data: Any, where: str, errors: list[InputError]) -> tuple[tuple[str, str], ...]:
    """More columns of the sheet, numbers and text alike."""
    from glidefit.reading.sheet_columns import KNOWN

    if not isinstance(data, Mapping):
        errors.append(
            InputError(
                where,
                f"the value is {data!r}",
                expected="columns with their values",
                remedy="For example { atp_uM = 10 }.",
            )
        )
        return ()
    for name, value in data.items():
        if name in KNOWN or not (_is_number(value) or isinstance(value, str)):
            errors.append(
                InputError(
                    f"{where}, {name}",
                    f"the value is {value!r}",
                    expected="a number or text, in a column that the sheet does not have itself",
                    remedy="Name the column otherwise." if name in KNOWN else "Correct the value.",
                )
            )
    return tuple(
        (name, f"{value:.10g}" if _is_number(value) else str(value)) for name, value in data.items()
    )


def _made(kind: type[Any], values: dict[str, Any], where: str, errors: list[InputError]) -> Any:
    """A record, or None if its values are impossible."""
    try:
        return kind(**values)
    except (ValueError, TypeError) as error:
        errors.append(
            InputError(
                where, str(error), expected="values that can be simulated", remedy="Correct it."
            )
        )
        return None


def _value(hint: Any, value: Any, where: str, errors: list[InputError]) -> Any:
    kinds = typing.get_args(hint) if isinstance(hint, types.UnionType) else (hint,)
    lists = [typing.get_args(kind)[0] for kind in kinds if Ellipsis in typing.get_args(kind)]
    if lists and (isinstance(value, list) or len(kinds) == 1):
        items = value if isinstance(value, list) else [value]
        return tuple(_value(lists[0], item, where, errors) for item in items)
    if typing.get_origin(hint) is tuple:
        wanted = f"{len(typing.get_args(hint))} numbers in brackets"
        if isinstance(value, list) and len(value) == len(typing.get_args(hint)):
            numbers = [v for v in value if _is_number(v)]
            if len(numbers) == len(value):
                return tuple(map(float, numbers))
    elif float in kinds:
        wanted = "a number"
        if _is_number(value):
            return float(value)
    elif typing.get_origin(hint) is typing.Literal:
        words = typing.get_args(hint)
        wanted = " or ".join(map(repr, words))
        if value in words:
            return value
    else:
        wanted = {int: "a whole number", str: "text", bool: "true or false"}[kinds[0]]
        if type(value) is kinds[0]:
            return value
    errors.append(
        InputError(where, f"the value is {value!r}", expected=wanted, remedy="Correct the recipe.")
    )
    return None


def _is_number(value: Any) -> bool:
    """True for a finite number; TOML also knows inf and nan."""
    return type(value) in (int, float) and math.isfinite(value)
