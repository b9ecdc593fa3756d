"""Results: frozen records of numbers and text, from which all pages and tables are made."""

from __future__ import annotations

import dataclasses
import math
import types
import typing
from dataclasses import dataclass
from typing import Any, TypeVar

from glidefit.quantities import QUANTITIES

FORMAT = "glidefit-results/1"
NAN = float("nan")


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """One quantity of one condition, with its confidence interval.

    NaN is "none"; one end alone NaN is an interval open on that side.
    """

    value: float = NAN
    low: float = NAN
    high: float = NAN
    level: float = 0.95
    covers: str = ""  # level to which the interval generalises: "days", "chambers" or ""
    method: str = ""
    problem: str = ""  # why not to quote it; empty if nothing is wrong

    def __post_init__(self) -> None:
        if self.low > self.high:
            raise ValueError(f"interval {self.low:g} to {self.high:g} is reversed")


@dataclass(frozen=True, slots=True, kw_only=True)
class Counts:
    """What went into a condition; frames are filament-frames."""

    days: int
    chambers: int
    recordings: int
    tracks_seen: int  # all, those under three positions included
    tracks_kept: int
    set_aside: dict[str, int]  # reason: tracks
    frames_seen: int
    frames_kept: int
    frames_set_aside: dict[str, int]  # reason: filament-frames


@dataclass(frozen=True, slots=True, kw_only=True)
class Curve:
    """A measured curve against lag, with its band, and the fitted model with its band."""

    lag_s: tuple[float, ...]
    value: tuple[float, ...]
    low: tuple[float, ...]  # pointwise, NaN where there is none
    high: tuple[float, ...]
    model: tuple[float, ...]  # NaN outside the fitted range
    model_low: tuple[float, ...]
    model_high: tuple[float, ...]
    fitted: tuple[bool, ...]  # lags at which the fit is judged; a fit to the MSD uses these
    frame_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class ChamberResult:
    """Estimates of one chamber: a replicate mean."""

    day: str
    chamber: str
    tracks_kept: int
    frames_kept: int
    speed_um_s: float
    rotational_diffusion_rad2_s: float
    motile_fraction: float
    frame_speed_um_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class TrackResult:
    """What one track says of itself."""

    recording: str
    day: str
    chamber: str
    track: str
    kept: bool
    set_aside_reason: str
    n_positions: int
    duration_s: float
    net_advance_um: float
    path_um: float
    speed_um_s: float  # NaN if the track is too short to tell
    speed_error_um_s: float = NAN  # standard error of the track's own speed
    # What the track alone says, under a weak prior: median, and a 68 % interval, one standard
    # error on the log scale; a low end of NaN beside a high one is open.
    rotational_diffusion_rad2_s: float = NAN
    rotational_diffusion_low_rad2_s: float = NAN
    rotational_diffusion_high_rad2_s: float = NAN
    rotational_diffusion_problem: str = ""  # why a kept track has none
    gliding_probability: float = NAN  # that it glides rather than rests, pivots or floats
    length_um: float = NAN  # median length of the contour; NaN if the table has none


@dataclass(frozen=True, slots=True, kw_only=True)
class DrawnTrack:
    """A track thinned to what a drawing can show, in µm."""

    recording: str
    track: str
    reason: str  # "" for kept
    x_um: tuple[float, ...]
    y_um: tuple[float, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class TimePoint:
    """Speed and motile fraction in one stretch of one recording."""

    recording: str
    day: str
    chamber: str
    time_s: float  # middle of the stretch, after the start of the recording
    minutes: float  # the same after the start in the chamber; NaN if the sheet does not say
    speed_um_s: float
    motile_fraction: float
    n_frames: int  # filament-frames


@dataclass(frozen=True, slots=True, kw_only=True)
class LevelSpread:
    """How much one level contributes to the uncertainty of the mean, relative to the value."""

    quantity: str
    level: str  # "days", "chambers", "recordings", "tracks"
    units: int
    relative_error: float  # standard error brought by drawing this level alone


@dataclass(frozen=True, slots=True, kw_only=True)
class VariancePart:
    """How far the values of one level differ, with its own interval; relative to the value."""

    quantity: str
    level: str  # "days", "day × condition", "chambers", "filaments"
    relative_sd: float
    low: float
    high: float
    confidence: float  # level of that interval
    df: int  # degrees of freedom of the mean square that it comes from
    share: float  # of the variance of a chamber on some day; day × condition is part of the days


@dataclass(frozen=True, slots=True, kw_only=True)
class Drift:
    """Motion common to the stuck objects of a recording."""

    measured: bool
    subtracted: bool
    n_objects: int
    speed_um_s: float  # NaN if not measured
    largest_um: float  # farthest displacement from the first frame
    note: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordingResult:
    """One recording: where it came from, what it said, what was done with it."""

    recording: str
    condition: str
    day: str
    chamber: str
    kind: str  # "video" or "track table"
    shape: str
    sha256: str
    n_frames: int
    frame_s: float
    frame_s_source: str  # "sheet" or "file"
    pixel_um: float  # NaN for a table in µm
    pixel_um_source: str
    exposure_s: float  # NaN if unknown
    exposure_source: str
    field_um: tuple[float, float]  # width, height
    localization_error_um: float
    smallest_speed_um_s: float
    drift: Drift
    tracks_seen: int
    tracks_kept: int
    set_aside: dict[str, int]
    problems: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelCheck:
    """One way in which the fitted model could fail to describe the tracks."""

    name: str
    value: float
    expected: float
    tolerance: float  # a larger distance from what is expected is a problem
    meaning: str

    @property
    def holds(self) -> bool:
        """Within the tolerance; true where there is no value."""
        return not abs(self.value - self.expected) > self.tolerance


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelEvidence:
    """One number that spoke for or against a model when the model was chosen."""

    model: str
    name: str
    value: float  # NaN where it was not needed
    needed: float  # more than this speaks for the model
    speaks_for: bool
    meaning: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionResult:
    """Everything about one condition."""

    condition: str
    slug: str
    control: bool
    model: str
    counts: Counts
    estimates: dict[str, Estimate]  # every key of QUANTITIES
    problems: tuple[str, ...]
    msd: tuple[Curve, ...]  # one for each frame interval
    heading_correlation: tuple[Curve, ...]
    chambers: tuple[ChamberResult, ...]
    tracks: tuple[TrackResult, ...]
    drawn: tuple[DrawnTrack, ...]
    time_points: tuple[TimePoint, ...]
    spread: tuple[LevelSpread, ...]
    generalises: str  # one sentence: to what the intervals generalise
    longest_lag_s: float
    heading_diffusion_rad2_s: float  # D_r read off the heading correlation
    methods: str  # a paragraph to quote
    model_checks: tuple[ModelCheck, ...] = ()
    variation: tuple[VariancePart, ...] = ()
    model_evidence: tuple[ModelEvidence, ...] = ()

    def __post_init__(self) -> None:
        if missing := QUANTITIES.keys() - self.estimates.keys():
            raise ValueError(f"{self.condition}: no estimate of {sorted(missing)}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Ratio:
    """A ratio to the reference, with its interval."""

    value: float
    low: float
    high: float
    level: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Difference:
    """A difference from the reference, with its interval and the p value that belongs to it."""

    value: float = NAN
    low: float = NAN
    high: float = NAN
    level: float = 0.95
    p_value: float = NAN


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitChange:
    """What one day (or one chamber of a single day) says of a comparison by itself."""

    day: str
    chamber: str  # "" for a whole day
    change: float  # ratio to the reference; of a fraction the difference


@dataclass(frozen=True, slots=True, kw_only=True)
class Comparison:
    """One condition against its reference in one quantity.

    A quantity has a ratio with its p value, or, if it is a fraction, a difference with its own.
    """

    condition: str
    reference: str
    quantity: str
    ratio: Ratio
    p_value: float
    p_adjusted: float  # over all comparisons in the primary quantity; NaN in the others
    p_permutation: float  # NaN where the design could never reject
    problem: str
    difference: Difference = dataclasses.field(default_factory=Difference)
    primary: bool = False
    smallest_p_permutation: float = NAN  # that the design can give
    equivalence_low: float = NAN  # of the ratio or difference, at the level of equivalence
    equivalence_high: float = NAN
    equivalence_level: float = NAN
    margin: float = NAN
    equivalent: bool = False  # shown to lie within the margin
    degrees_of_freedom: float = NAN
    covers: str = ""  # level to which the interval generalises: "days", "chambers" or ""
    method: str = ""
    units: tuple[UnitChange, ...] = ()  # of paired designs


@dataclass(frozen=True, slots=True, kw_only=True)
class SideLook:
    """The ratio of speeds looked at in another way."""

    name: str
    ratio: Ratio
    meaning: str


@dataclass(frozen=True, slots=True, kw_only=True)
class ConditionPair:
    """How a condition and its reference were compared, whatever the quantity."""

    condition: str
    reference: str
    paired: bool
    covers: str
    shared_days: int
    days: int
    reference_days: int
    note: str  # how it was judged, and what that costs
    problems: tuple[str, ...] = ()
    side_looks: tuple[SideLook, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponsePoint:
    """The value of one condition on one day, or in one chamber of a single day."""

    condition: str
    day: str
    chamber: str  # "" for a whole day
    x: float
    inhibitor: float  # NaN without one
    value: float


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseParameter:
    """One parameter of a curve; NaN ends are open."""

    key: str
    label: str
    unit: str
    value: float
    low: float
    high: float
    level: float
    error: float  # standard error
    method: str
    problem: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseModel:
    """One curve that was tried."""

    name: str
    formula: str
    criterion: float  # Akaike's, for small samples; NaN if it was not fitted
    residual_sd: float
    chosen: bool
    problem: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class ResponseCurve:
    """Speed against a column of numbers: points, the chosen curve with its band, parameters."""

    column: str
    label: str
    unit: str
    series: str  # "" if there is one
    quantity: str
    model: str  # "" if none could be fitted
    formula: str
    points: tuple[ResponsePoint, ...]
    x: tuple[float, ...]
    at_inhibitor: tuple[float, ...]  # at which each piece of the curve is drawn; NaN without one
    curve: tuple[float, ...]
    low: tuple[float, ...]
    high: tuple[float, ...]
    level: float
    covers: str
    parameters: tuple[ResponseParameter, ...]
    models: tuple[ResponseModel, ...]
    method: str
    problems: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class ChartDay:
    """One day of a chart."""

    day: str
    value: float
    chambers: int
    signals: tuple[str, ...]  # rules that it breaks


@dataclass(frozen=True, slots=True, kw_only=True)
class DayChart:
    """One condition day by day, with centre line and limits."""

    condition: str
    control: bool
    quantity: str
    centre: float
    low: float
    high: float
    relative_sigma: float  # from successive days
    relative_sd: float  # of all days that are like the others
    days: tuple[ChartDay, ...]
    rules: str
    problems: tuple[str, ...] = ()  # days out of control


@dataclass(frozen=True, slots=True, kw_only=True)
class SettingRow:
    """One setting as it was used."""

    key: str  # "link.max_speed"
    value: str
    unit: str
    source: str  # "default", "file" or "option"
    help: str


@dataclass(frozen=True, slots=True, kw_only=True)
class StudyResult:
    """A whole run: all conditions of one assay sheet."""

    name: str
    conditions: tuple[ConditionResult, ...]
    comparisons: tuple[Comparison, ...]
    recordings: tuple[RecordingResult, ...]
    settings: tuple[SettingRow, ...]
    problems: tuple[str, ...]
    seed: int
    version: str
    sheet_sha256: str
    pairs: tuple[ConditionPair, ...] = ()
    responses: tuple[ResponseCurve, ...] = ()
    day_charts: tuple[DayChart, ...] = ()
    format: str = FORMAT

    def to_json(self) -> dict[str, Any]:
        """Plain values for json.dump; NaN as None."""
        return typing.cast(dict[str, Any], _plain(self))

    @classmethod
    def from_json(cls, data: dict[str, Any]) -> StudyResult:
        """The record that `to_json` made.

        Raises
        ------
        ValueError
            If the format is another, or a key is missing.
        """
        if data.get("format") != FORMAT:
            raise ValueError(f"format is {data.get('format')!r}, not {FORMAT!r}")
        return _record(cls, data)


def _plain(value: Any) -> Any:
    if dataclasses.is_dataclass(value):
        # The format comes first, as a reader of the file expects.
        names = [f.name for f in dataclasses.fields(value)]
        names.sort(key=lambda name: name != "format")
        return {name: _plain(getattr(value, name)) for name in names}
    if isinstance(value, dict):
        return {key: _plain(item) for key, item in value.items()}
    if isinstance(value, (tuple, list)):
        return [_plain(item) for item in value]
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return value


_Record = TypeVar("_Record")


def _record(kind: type[_Record], data: dict[str, Any]) -> _Record:
    hints = typing.get_type_hints(kind)
    fields = dataclasses.fields(kind)  # type: ignore[arg-type]
    # A key with a default was added later: earlier results do not have it.
    needed = [
        f.name
        for f in fields
        if f.default is dataclasses.MISSING and f.default_factory is dataclasses.MISSING
    ]
    if missing := [name for name in needed if name not in data]:
        raise ValueError(f"{kind.__name__}: key {missing[0]!r} is missing")
    there = [f.name for f in fields if f.name in data]
    if kind is ConditionResult:
        unknown = _plain(Estimate(problem="not estimated by the version that made this run"))
        added = {key: unknown for key in QUANTITIES if key not in data["estimates"]}
        data = data | {"estimates": data["estimates"] | added}
    return kind(**{name: _typed(hints[name], data[name]) for name in there})


def _typed(hint: Any, value: Any) -> Any:
    origin, args = typing.get_origin(hint), typing.get_args(hint)
    if hint is float:
        return NAN if value is None else float(value)
    if origin is tuple:
        kinds = [args[0]] * len(value) if args[-1] is Ellipsis else args
        return tuple(_typed(k, v) for k, v in zip(kinds, value, strict=True))
    if origin is dict:
        return {key: _typed(args[1], item) for key, item in value.items()}
    if isinstance(hint, type) and not isinstance(hint, types.GenericAlias):
        return _record(hint, value) if dataclasses.is_dataclass(hint) else value
    return value
