"""An invented study: every record of the results, with paths that look like gliding."""

from __future__ import annotations

import dataclasses
import itertools
import math
import re
from collections.abc import Callable, Sequence
from html.parser import HTMLParser

import numpy as np
import pytest

from glidefit.quantities import QUANTITIES
from glidefit.results import (
    ChamberResult,
    ChartDay,
    Comparison,
    ConditionPair,
    ConditionResult,
    Counts,
    Curve,
    DayChart,
    DrawnTrack,
    Drift,
    Estimate,
    LevelSpread,
    ModelCheck,
    ModelEvidence,
    Ratio,
    RecordingResult,
    ResponseCurve,
    ResponseModel,
    ResponseParameter,
    ResponsePoint,
    SettingRow,
    SideLook,
    StudyResult,
    TimePoint,
    TrackResult,
    VariancePart,
)
from glidefit.writing.slugs import slugs

NAN = math.nan
SPEED, TURNING = 0.8, 0.05
REASONS = ("stuck", "pivoting", "detached", "jump", "short")
GENERALISES = "The intervals generalise to further days of this preparation in this laboratory."
METHODS = (
    "Gliding filaments were tracked and an active-Brownian model was fitted to the mean squared "
    "displacement on a logarithmic scale, with localization error and blur of the exposure; "
    "intervals (95 %) are t intervals over day values."
)


@dataclasses.dataclass(frozen=True, kw_only=True)
class Size:
    """How much the invented condition holds."""

    days: int = 3
    chambers: int = 2  # a day
    recordings: int = 2  # a chamber
    tracks: int = 17  # a recording
    positions: int = 80
    aside: int = 3  # of the tracks of a recording


def estimates() -> dict[str, Estimate]:
    """All quantities; intervals of all kinds among them."""
    numbers = {
        "speed_um_s": (0.8034, 0.7712, 0.8356),
        "rotational_diffusion_rad2_s": (0.0512, 0.0431, 0.0609),
        "persistence_length_um": (15.69, 13.1, 18.9),
        "path_persistence_length_um": (7.845, 6.55, 9.45),
        "motile_fraction": (0.824, 0.751, 0.897),
        "ever_moved_fraction": (0.861, 0.79, 0.93),
        "smallest_speed_um_s": (0.0312, NAN, NAN),
        "translational_diffusion_um2_s": (0.00021, NAN, 0.00094),
        "localization_error_um": (0.0312, 0.0309, 0.0315),
        "speed_spread_um_s": (0.0713, 0.0502, 0.0924),
        "mean_speed_um_s": (0.7912, 0.7571, 0.8253),
        "running_fraction": (0.9848, 0.9701, 0.9995),
        "stop_rate_per_s": (0.0154, 0.0052, 0.0256),
        "go_rate_per_s": (NAN, NAN, NAN),
        "diffusion_um2_s": (NAN, NAN, NAN),
        "turning_rate_rad_s": (-0.0004, -0.0061, 0.0053),
        "sideways_diffusion_um2_s": (NAN, NAN, NAN),
        "further_error_along_um": (NAN, NAN, NAN),
        "frame_speed_um_s": (0.8531, 0.8204, 0.8858),
    }
    problems = {
        "diffusion_um2_s": "The filaments are driven.",
        "go_rate_per_s": "Pauses are shorter than a frame.",
        "sideways_diffusion_um2_s": "A filament follows its path.",
        "further_error_along_um": "Taken as equal in all directions.",
        "translational_diffusion_um2_s": "Not told apart from localization error.",
    }
    return {
        key: Estimate(
            value=value,
            low=low,
            high=high,
            covers="days" if math.isfinite(low) else "",
            method="t over day values",
            problem=problems.get(key, ""),
        )
        for key, (value, low, high) in numbers.items()
    }


def no_estimates() -> dict[str, Estimate]:
    """What a condition with nothing left has."""
    return dict.fromkeys(QUANTITIES, Estimate(problem="No track was kept."))


def _path(rng: np.random.Generator, n: int, *, moving: bool) -> tuple[np.ndarray, np.ndarray]:
    start = rng.uniform(15, 65, 2)
    if not moving:
        return start[0] + rng.normal(0, 0.05, n), start[1] + rng.normal(0, 0.05, n)
    heading = rng.uniform(-np.pi, np.pi) + np.cumsum(rng.normal(0, np.sqrt(2 * TURNING * 0.2), n))
    steps = SPEED * 0.2 * np.column_stack([np.cos(heading), np.sin(heading)])
    x, y = (start + np.cumsum(steps, axis=0)).T
    return np.clip(x, 0, 80), np.clip(y, 0, 80)


def msd_curve(frame_s: float = 0.2, n: int = 60) -> Curve:
    """A curve near its model, fitted over its first third."""
    lag = frame_s * np.arange(1, n + 1)
    u = TURNING * lag
    model = 2 * (SPEED * lag / u) ** 2 * (u - 1 + np.exp(-u)) + 0.004
    value = model * (1 + 0.02 * np.sin(lag))
    fitted = np.arange(n) < n // 3
    shown = np.where(fitted, model, NAN)
    columns = (lag, value, 0.93 * value, 1.07 * value, shown, 0.97 * shown, 1.03 * shown)
    return Curve(**_curve(columns, fitted, frame_s))


def correlation_curve(frame_s: float = 0.2, n: int = 60) -> Curve:
    """An exponential decay with a little scatter."""
    lag = frame_s * np.arange(1, n + 1)
    model = 0.99 * np.exp(-TURNING * lag)
    value = model + 0.01 * np.sin(2 * lag)
    fitted = np.arange(n) < n // 3
    shown = np.where(fitted, model, NAN)
    columns = (lag, value, value - 0.03, value + 0.03, shown, shown - 0.01, shown + 0.01)
    return Curve(**_curve(columns, fitted, frame_s))


def _curve(columns: Sequence[np.ndarray], fitted: np.ndarray, frame_s: float) -> dict:
    names = ("lag_s", "value", "low", "high", "model", "model_low", "model_high")
    arrays = {name: tuple(c.tolist()) for name, c in zip(names, columns, strict=True)}
    return {**arrays, "fitted": tuple(fitted.tolist()), "frame_s": frame_s}


def make_condition(
    name: str, slug: str, *, control: bool = False, size: Size | None = None, seed: int = 1
) -> tuple[ConditionResult, tuple[RecordingResult, ...]]:
    """A condition and its recordings."""
    size = size or Size()
    rng = np.random.default_rng(seed)
    chambers, tracks, drawn, points, recordings = [], [], [], [], []
    for d, c in itertools.product(range(size.days), range(size.chambers)):
        day, chamber = f"2026-03-{d + 2:02d}", "ABCDEFGHIJKLMNOP"[c]
        speed = SPEED * (1 + 0.06 * rng.standard_normal())
        chambers.append(
            ChamberResult(
                day=day,
                chamber=chamber,
                tracks_kept=size.recordings * (size.tracks - size.aside),
                frames_kept=size.recordings * (size.tracks - size.aside) * size.positions,
                speed_um_s=speed,
                rotational_diffusion_rad2_s=TURNING * (1 + 0.15 * rng.standard_normal()),
                motile_fraction=float(rng.uniform(0.75, 0.9)),
                frame_speed_um_s=1.06 * speed,
            )
        )
        for r in range(size.recordings):
            recording = f"{day}/{slug}_ch{chamber}_{r + 1}.tif"
            for t in range(size.tracks):
                kept = t >= size.aside
                reason = "" if kept else REASONS[(t + r) % 4]
                x, y = _path(rng, size.positions, moving=kept or reason == "jump")
                drawn.append(
                    DrawnTrack(
                        recording=recording,
                        track=str(t),
                        reason=reason,
                        x_um=tuple(x.round(3).tolist()),
                        y_um=tuple(y.round(3).tolist()),
                    )
                )
                tracks.append(
                    TrackResult(
                        recording=recording,
                        day=day,
                        chamber=chamber,
                        track=str(t),
                        kept=kept,
                        set_aside_reason=reason,
                        n_positions=size.positions,
                        duration_s=0.2 * (size.positions - 1),
                        net_advance_um=float(np.hypot(x[-1] - x[0], y[-1] - y[0])),
                        path_um=float(np.hypot(np.diff(x), np.diff(y)).sum()),
                        speed_um_s=float(speed + 0.07 * rng.standard_normal()) if kept else NAN,
                    )
                )
            for k in range(5):
                points.append(
                    TimePoint(
                        recording=recording,
                        day=day,
                        chamber=chamber,
                        time_s=3.2 * (k + 0.5),
                        minutes=4.0 * r + 3.2 * (k + 0.5) / 60,
                        speed_um_s=speed * (1 + 0.03 * rng.standard_normal()),
                        motile_fraction=float(rng.uniform(0.75, 0.9)),
                        n_frames=int(rng.integers(150, 300)),
                    )
                )
            recordings.append(make_recording(recording, name, day, chamber, size=size))
    n = size.days * size.chambers * size.recordings
    aside = {
        reason: sum(t.set_aside_reason == reason for t in tracks)
        for reason in REASONS
        if any(t.set_aside_reason == reason for t in tracks)
    }
    return (
        ConditionResult(
            condition=name,
            slug=slug,
            control=control,
            model="active",
            counts=Counts(
                days=size.days,
                chambers=size.days * size.chambers,
                recordings=n,
                tracks_seen=n * size.tracks,
                tracks_kept=n * (size.tracks - size.aside),
                set_aside=aside,
                frames_seen=n * size.tracks * size.positions,
                frames_kept=n * (size.tracks - size.aside) * size.positions,
                frames_set_aside={k: v * size.positions for k, v in aside.items()},
            ),
            estimates=estimates(),
            problems=(),
            msd=(msd_curve(),),
            heading_correlation=(correlation_curve(),),
            chambers=tuple(chambers),
            tracks=tuple(tracks),
            drawn=tuple(drawn),
            time_points=tuple(points),
            spread=tuple(
                LevelSpread(quantity=q, level=level, units=units, relative_error=error)
                for q, factor in (("speed_um_s", 1.0), ("rotational_diffusion_rad2_s", 2.6))
                for level, units, error in (
                    ("days", size.days, 0.021 * factor),
                    ("chambers", size.days * size.chambers, 0.011 * factor),
                    ("recordings", n, 0.006 * factor),
                    ("tracks", len(tracks), 0.004 * factor),
                )
            ),
            variation=tuple(
                VariancePart(
                    quantity="speed_um_s",
                    level=level,
                    relative_sd=sd,
                    low=low,
                    high=high,
                    confidence=0.95,
                    df=df,
                    share=share,
                )
                for level, sd, low, high, df, share in (
                    ("days", 0.071, 0.0, 0.45, 2, 0.72),
                    ("day × condition", 0.032, 0.0, 0.21, 2, 0.15),
                    ("chambers", 0.038, 0.0, 0.14, 3, 0.21),
                    ("filaments", 0.0222, 0.02, 0.0249, 162, 0.07),
                )
            ),
            generalises=GENERALISES,
            longest_lag_s=4.0,
            heading_diffusion_rad2_s=0.0498,
            methods=METHODS,
            model_checks=(
                ModelCheck(
                    name="size of innovations",
                    value=1.004,
                    expected=1.0,
                    tolerance=0.1,
                    meaning="Mean square of what each position adds to the prediction.",
                ),
                ModelCheck(
                    name="D_r from the MSD",
                    value=1.8,
                    expected=1.0,
                    tolerance=0.3,
                    meaning="Rotational diffusion fitted to the MSD, over that of the likelihood.",
                ),
            ),
            model_evidence=(
                ModelEvidence(
                    model="pausing",
                    name="share of time paused",
                    value=0.0152,
                    needed=0.02,
                    speaks_for=False,
                    meaning="Mean over the chambers, as fitted.",
                ),
            ),
        ),
        tuple(recordings),
    )


def make_recording(
    recording: str, condition: str, day: str, chamber: str, *, size: Size
) -> RecordingResult:
    """A video whose exposure is unknown."""
    return RecordingResult(
        recording=recording,
        condition=condition,
        day=day,
        chamber=chamber,
        kind="video",
        shape="filament",
        sha256="3f" * 32,
        n_frames=size.positions,
        frame_s=0.2,
        frame_s_source="file",
        pixel_um=0.1083,
        pixel_um_source="sheet",
        exposure_s=NAN,
        exposure_source="",
        field_um=(80.0, 80.0),
        localization_error_um=0.0312,
        smallest_speed_um_s=0.0301,
        drift=Drift(
            measured=True,
            subtracted=True,
            n_objects=4,
            speed_um_s=0.0021,
            largest_um=0.034,
            note="subtracted",
        ),
        tracks_seen=size.tracks,
        tracks_kept=size.tracks - size.aside,
        set_aside={"stuck": size.aside},
        problems=(),
    )


def setting_rows() -> tuple[SettingRow, ...]:
    """Some settings of each source."""
    rows = (
        ("link.max_speed", "12.0", "µm/s", "default", "Fastest gliding still believed."),
        ("link.max_gap", "2", "frames", "default", "Longest absence bridged inside a track."),
        ("clean.stuck", "2.0", "× noise", "default", "A track that strays no farther is stuck."),
        ("clean.jump", "4.0", "× typical step", "file", "A step longer than this is a jump."),
        ("fit.unknown_exposure", "1.0", "× frame interval", "default", "Exposure assumed."),
        ("interval.level", "0.95", "", "default", "Confidence level of the intervals."),
        ("interval.resamples", "4000", "", "option", "Bootstrap resamples."),
    )
    return tuple(
        SettingRow(key=key, value=value, unit=unit, source=source, help=text)
        for key, value, unit, source, text in rows
    )


def make_study(
    names: Sequence[str] = ("kinesin, wild type", "kinesin, R203A"),
    *,
    size: Size | None = None,
    control: str | None = "kinesin, wild type",
) -> StudyResult:
    """A study with these conditions."""
    slug_of = slugs(names)
    made = [
        make_condition(name, slug_of[name], control=name == control, size=size, seed=n + 1)
        for n, name in enumerate(names)
    ]
    return StudyResult(
        name="assay",
        conditions=tuple(condition for condition, _ in made),
        comparisons=(),
        recordings=tuple(itertools.chain.from_iterable(recordings for _, recordings in made)),
        settings=setting_rows(),
        problems=(),
        seed=20260302,
        version="0.1.0",
        sheet_sha256="ab" * 32,
    )


def make_comparison(condition: str, reference: str) -> Comparison:
    """A ratio with its tests."""
    return Comparison(
        condition=condition,
        reference=reference,
        quantity="speed_um_s",
        ratio=Ratio(value=1.12, low=1.03, high=1.22, level=0.95),
        p_value=0.0132,
        p_adjusted=0.0264,
        p_permutation=NAN,
        problem="",
    )


def make_pair(text: str) -> ConditionPair:
    """A pair with this text everywhere."""
    return ConditionPair(
        condition=text,
        reference=text,
        paired=True,
        covers=text,
        shared_days=2,
        days=2,
        reference_days=2,
        note=text,
        problems=(text,),
        side_looks=(
            SideLook(name=text, ratio=Ratio(value=1, low=0.9, high=1.1, level=0.95), meaning=text),
        ),
    )


def make_curve(text: str) -> ResponseCurve:
    """A curve with this text everywhere."""
    points = tuple(
        ResponsePoint(condition=text, day=text, chamber=text, x=x, inhibitor=NAN, value=0.1 * x)
        for x in (1.0, 2.0, 3.0)
    )
    parameter = ResponseParameter(
        key=text,
        label=text,
        unit=text,
        value=1,
        low=0.5,
        high=2,
        level=0.95,
        error=0.3,
        method=text,
        problem=text,
    )
    model = ResponseModel(
        name=text, formula=text, criterion=3.0, residual_sd=0.1, chosen=True, problem=text
    )
    names = ("column", "label", "unit", "series", "quantity", "model", "formula", "method")
    return ResponseCurve(
        **dict.fromkeys(names, text),
        points=points,
        x=(1.0, 3.0),
        at_inhibitor=(NAN, NAN),
        curve=(0.1, 0.3),
        low=(0.05, 0.2),
        high=(0.2, 0.4),
        level=0.95,
        covers=text,
        parameters=(parameter,),
        models=(model,),
        problems=(text,),
    )


def make_chart(text: str) -> DayChart:
    """A chart with this text everywhere."""
    days = tuple(
        ChartDay(day=f"{text} {n}", value=0.8 + 0.01 * n, chambers=1, signals=(text,))
        for n in range(5)
    )
    return DayChart(
        condition=text,
        control=True,
        quantity=text,
        centre=0.8,
        low=0.7,
        high=0.9,
        relative_sigma=0.03,
        relative_sd=0.03,
        days=days,
        rules=text,
        problems=(text,),
    )


def empty(condition: ConditionResult) -> ConditionResult:
    """The condition when cleaning has left nothing."""
    counts = dataclasses.replace(
        condition.counts,
        tracks_kept=0,
        frames_kept=0,
        set_aside={"stuck": condition.counts.tracks_seen},
        frames_set_aside={"stuck": condition.counts.frames_seen},
    )
    return dataclasses.replace(
        condition,
        counts=counts,
        estimates=no_estimates(),
        problems=("No track was kept: every track is stuck.",),
        msd=(),
        heading_correlation=(),
        chambers=(),
        tracks=(),
        drawn=(),
        time_points=(),
        spread=(),
        variation=(),
        longest_lag_s=NAN,
        heading_diffusion_rad2_s=NAN,
    )


@pytest.fixture(scope="session")
def invented() -> Callable[..., StudyResult]:
    """The factory of invented studies."""
    return make_study


@pytest.fixture(scope="session")
def study() -> StudyResult:
    """Two conditions, the first the control; 3 days, 2 chambers a day, 204 tracks each."""
    return make_study()


@pytest.fixture(scope="session")
def compare() -> Callable[[str, str], Comparison]:
    """The factory of comparisons."""
    return make_comparison


@pytest.fixture(scope="session")
def emptied() -> Callable[[ConditionResult], ConditionResult]:
    """What a condition is when cleaning has left nothing."""
    return empty


@pytest.fixture(scope="session")
def sized() -> type[Size]:
    """How much an invented condition holds."""
    return Size


HOSTILE = (
    "<script>alert(1)</script>",
    "../../x",
    '" onmouseover="alert(1)" x=\'',
    "\u202eRTL \u2066 \x00\x07 \ud800 بث",
    "µM 対照 " + "longname" * 30,
    "$x^2$ & {{ 7 * 7 }} {% raw %}",
    "",
)


@pytest.fixture(scope="session")
def hostile() -> StudyResult:
    """A study in which every text of the user tries to leave its place."""
    text = "</td></svg></title><script>alert(2)</script><img src=x onerror=alert(3)>\x1b"
    whose = {"day": f"<b>{text}", "chamber": text}
    study = make_study(HOSTILE, size=Size(days=2, chambers=1, recordings=1, tracks=6), control="")
    replace = dataclasses.replace
    conditions = [
        replace(
            c,
            chambers=tuple(replace(x, **whose) for x in c.chambers),
            tracks=tuple(replace(x, track=text, **whose) for x in c.tracks),
            drawn=tuple(replace(x, track=text, reason=x.reason and text) for x in c.drawn),
            time_points=tuple(replace(x, **whose) for x in c.time_points),
            counts=replace(c.counts, set_aside={text: 3}, frames_set_aside={text: 240}),
            estimates={
                key: replace(e, covers=text, method=text, problem=text)
                for key, e in c.estimates.items()
            },
            spread=tuple(replace(x, quantity=text, level=text) for x in c.spread),
            variation=tuple(replace(x, quantity=text, level=text) for x in c.variation),
            problems=(text,),
            generalises=text,
            methods=text,
            model=text,
        )
        for c in study.conditions
    ]
    note = {"pixel_um_source": text, "exposure_source": text, "kind": text, "shape": text}
    recordings = [
        replace(
            r, drift=replace(r.drift, note=text), sha256=text, problems=(text,), **note, **whose
        )
        for r in study.recordings
    ]
    return replace(
        study,
        name=text,
        conditions=tuple(conditions),
        recordings=tuple(recordings),
        comparisons=(replace(make_comparison(text, text), quantity=text, problem=text),),
        pairs=(make_pair(text),),
        responses=(make_curve(text),),
        day_charts=(make_chart(text),),
        settings=tuple(replace(s, value=text, unit=text, help=text) for s in study.settings),
        problems=(text,),
        version=text,
        sheet_sha256=text,
    )


class PageReader(HTMLParser):
    """Reads a page strictly: every tag closed where it belongs, every attribute quoted."""

    VOID = frozenset({"meta", "br", "link", "img", "hr", "input", "wbr"})
    QUOTED = re.compile(r"<[\w:-]+(\s+[\w:-]+=(\"[^\"<>]*\"|'[^'<>]*'))*\s*/?>")

    def __init__(self):
        super().__init__(convert_charrefs=True)
        self.open = []
        self.elements = []
        self.faults = []
        self.words = []

    def handle_starttag(self, tag, attrs):
        self._element(tag, attrs)
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self._element(tag, attrs)

    def _element(self, tag, attrs):
        source = self.get_starttag_text() or ""
        if not self.QUOTED.fullmatch(source):
            self.faults.append(f"not quoted: {source}")
        if len({name for name, _ in attrs}) != len(attrs):
            self.faults.append(f"attribute twice: {source}")
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.faults.append(f"</{tag}> closes nothing")

    def handle_data(self, data):
        inside = self.open[-1] if self.open else ""
        said = inside in {"title", "desc"} and self.open[-2:-1] == ["svg"]
        drawn = "svg" in self.open and not said
        if inside not in {"style", "script"} and not drawn and data.strip():
            self.words.append(" ".join(data.split()))

    @property
    def ids(self):
        """Every id of the page."""
        return [attrs["id"] for _, attrs in self.elements if "id" in attrs]

    def of(self, tag) -> list[dict[str, str]]:
        """Attributes of every element with this tag."""
        return [attrs for name, attrs in self.elements if name == tag]


@pytest.fixture(scope="session")
def read_page():
    """Read a page and fail if it is not well formed."""

    def read(text):
        reader = PageReader()
        reader.feed(text)
        reader.close()
        assert reader.faults == []
        assert reader.open == []
        assert len(set(reader.ids)) == len(reader.ids)
        return reader

    return read


@pytest.fixture(scope="session")
def compared() -> StudyResult:
    """Three conditions of six days compared, along a curve, and day by day."""
    from glidefit.settings import CompareSettings, ResponseSettings
    from glidefit.steps.compare import FilmedAt, compare
    from glidefit.steps.day_chart import day_charts
    from glidefit.steps.response import SheetColumns, responses

    names = ("wild type", "mutant", "mutant, 10 µM")
    size = Size(days=6, chambers=2, recordings=1, tracks=4)
    study = make_study(names, size=size, control="wild type")
    first = study.conditions[0]
    slow = [
        dataclasses.replace(r, speed_um_s=0.4 * r.speed_um_s) if r.day == "2026-03-05" else r
        for r in first.chambers
    ]
    conditions = (dataclasses.replace(first, chambers=tuple(slow)), *study.conditions[1:])
    order = [
        FilmedAt(condition=name, clock=f"day {d}", minutes=60.0 * n)
        for d in range(6)
        for n, name in enumerate(names)
    ]
    comparisons, pairs = compare(
        conditions, settings=CompareSettings(), level=0.95, seed=1, filmed=order
    )
    columns = {
        name: SheetColumns(numbers={"atp_uM": (x,)}, labels={})
        for name, x in zip(names, (1000.0, 100.0, 10.0), strict=True)
    }
    curves = responses(conditions, columns, settings=ResponseSettings(), level=0.95)
    undetermined = responses(
        conditions, columns, settings=ResponseSettings(model="hill", column="atp_uM"), level=0.95
    )
    return dataclasses.replace(
        study,
        conditions=conditions,
        comparisons=comparisons,
        pairs=pairs,
        responses=(*curves, *undetermined),
        day_charts=day_charts(conditions),
    )
