"""Put one condition together: counts, estimates, curves, replicate means, problems, methods."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from glidefit.evidence import (
    REASONS,
    SHORT,
    UNCLEAR,
    BorrowedSpread,
    CleanRecording,
    Combined,
    TrackDiffusion,
)
from glidefit.quantities import QUANTITIES
from glidefit.results import (
    NAN,
    ChamberResult,
    ConditionResult,
    Counts,
    Curve,
    DrawnTrack,
    Estimate,
    LevelSpread,
    ModelCheck,
    TrackResult,
)

Floats = NDArray[np.float64]

_NO_PAUSES = "not fitted: no pauses of a size that matters were seen"
# A heading vaguer than this, in rad, is no longer Gaussian, and D_r drifts.
_VAGUE_HEADING = 0.25
_NOT_IN_MODEL = {
    "stop_rate_per_s": _NO_PAUSES,
    "go_rate_per_s": _NO_PAUSES,
    "diffusion_um2_s": "not fitted: the filaments are driven",
    "turning_rate_rad_s": "not fitted: no steady turning of a size that matters was seen",
    "sideways_diffusion_um2_s": "not fitted: a filament follows its path; a setting frees it",
    "further_error_along_um": "not fitted: taken as equal in all directions; a setting frees it",
}
# Fewer innovations say nothing of their distribution.
_FEWEST_INNOVATIONS = 200
_SPREAD_OF = {
    "speed_um_s": "speed",
    "rotational_diffusion_rad2_s": "rotational_diffusion",
    "motile_fraction": "motile_fraction",
}
# Of the kept tracks, so many may be undecided before it is a problem.
_FEW_UNDECIDED = 0.02


def counts(recordings: Sequence[CleanRecording]) -> Counts:
    """Tracks and filament-frames, kept and set aside by reason."""
    reason = np.concatenate([r.clean.reason for r in recordings])
    frames = np.concatenate([r.clean.tracks.n_positions for r in recordings])
    return Counts(
        days=len({r.day for r in recordings}),
        chambers=len({(r.day, r.chamber) for r in recordings}),
        recordings=len(recordings),
        tracks_seen=len(reason),
        tracks_kept=int((reason == "").sum()),
        set_aside={name: int((reason == name).sum()) for name in REASONS},
        frames_seen=int(frames.sum()),
        frames_kept=int(frames[reason == ""].sum()),
        frames_set_aside={name: int(frames[reason == name].sum()) for name in REASONS},
    )


def all_estimates(known: Mapping[str, Estimate], *, level: float) -> dict[str, Estimate]:
    """Every quantity in its order; those that were not obtained say why."""
    missing = {key: Estimate(level=level, problem=why) for key, why in _NOT_IN_MODEL.items()}
    nothing = Estimate(level=level, problem="no track was left to fit")
    return {key: known.get(key) or missing.get(key) or nothing for key in QUANTITIES}


_PASSIVE = (
    "localization_error_um",
    "diffusion_um2_s",
    "frame_speed_um_s",
    "motile_fraction",
    "ever_moved_fraction",
    "smallest_speed_um_s",
)


def passive(known: Mapping[str, Estimate], speed: Estimate) -> dict[str, Estimate]:
    """Estimates of filaments that nothing drives; the rest says that there is no propulsion."""
    no = Estimate(level=speed.level, problem="not fitted: the tracks show no directed motion")
    kept = {key: known[key] for key in _PASSIVE if key in known}
    return (
        {key: no for key in QUANTITIES if key != "smallest_speed_um_s"}
        | kept
        | {"speed_um_s": speed}
    )


def without_pauses(known: Mapping[str, Estimate], *, level: float) -> dict[str, Estimate]:
    """Estimates of a model without pauses: filaments always run."""
    rates = ("stop_rate_per_s", "go_rate_per_s")
    always = Estimate(
        value=1.0, level=level, method="taken as 1: no pauses of a size that matters were seen"
    )
    kept = {key: estimate for key, estimate in known.items() if key not in rates}
    return kept | {"mean_speed_um_s": known["speed_um_s"], "running_fraction": always}


def smallest_speed(recordings: Sequence[CleanRecording], *, level: float) -> Estimate:
    """Median over recordings of the speed below which a track reads as stuck."""
    each = [r.clean.smallest_speed_um_s for r in recordings]
    return Estimate(
        value=float(np.median(each)), level=level, method="threshold of the rule for stuck tracks"
    )


def curve(
    lag_s: Floats,
    fitted: NDArray[np.bool_],
    frame_s: float,
    measured: tuple[Floats, Floats, Floats],
    model: tuple[Floats, Floats, Floats],
) -> Curve:
    """A curve of the page; points without pairs are left out."""
    there = np.isfinite(measured[0])

    def part(values: Floats) -> tuple[float, ...]:
        return tuple(float(f"{value:.6g}") for value in values[there])

    return Curve(
        lag_s=part(lag_s),
        value=part(measured[0]),
        low=part(measured[1]),
        high=part(measured[2]),
        model=part(model[0]),
        model_low=part(model[1]),
        model_high=part(model[2]),
        fitted=tuple(bool(f) for f in fitted[there]),
        frame_s=frame_s,
    )


def chambers(
    recordings: Sequence[CleanRecording],
    values: Mapping[tuple[str, str], Mapping[str, float]],
) -> tuple[ChamberResult, ...]:
    """Replicate means. ``values``: by (day, chamber), the columns of fit and motility by name."""
    keys = dict.fromkeys((r.day, r.chamber) for r in recordings)
    out = []
    for day, chamber in sorted(keys):
        own = [r for r in recordings if (r.day, r.chamber) == (day, chamber)]
        known = values.get((day, chamber), {})
        out.append(
            ChamberResult(
                day=day,
                chamber=chamber,
                tracks_kept=sum(int(r.clean.kept.sum()) for r in own),
                frames_kept=sum(int(r.clean.tracks.n_positions[r.clean.kept].sum()) for r in own),
                speed_um_s=known.get("speed", NAN),
                rotational_diffusion_rad2_s=known.get("rotational_diffusion", NAN),
                motile_fraction=known.get("motile_fraction", NAN),
                frame_speed_um_s=known.get("frame_speed", NAN),
            )
        )
    return tuple(out)


def tracks(
    recordings: Sequence[CleanRecording],
    speeds: Mapping[str, tuple[Floats, Floats]],
    diffusions: Mapping[str, TrackDiffusion],
) -> tuple[TrackResult, ...]:
    """What every track says of itself, set-aside ones too."""
    out = []
    for r in recordings:
        t, kept = r.clean.tracks, r.clean.kept
        first, last = t.offsets[:-1], t.offsets[1:] - 1
        duration = t.time_s[last] - t.time_s[first]
        net = np.hypot(t.x_um[last] - t.x_um[first], t.y_um[last] - t.y_um[first])
        speed, error = np.full(t.n_tracks, np.nan), np.full(t.n_tracks, np.nan)
        length = _median_lengths(r)
        if r.recording in speeds:
            speed[kept], error[kept] = speeds[r.recording]
        own = diffusions.get(r.recording)
        turning, problem = np.full((3, t.n_tracks), np.nan), np.full(t.n_tracks, "", dtype=object)
        if own is not None:
            turning[:, kept], problem[kept] = (own.value, own.low, own.high), own.problem
        out += [
            TrackResult(
                recording=r.recording,
                day=r.day,
                chamber=r.chamber,
                track=str(t.label[k]),
                kept=bool(kept[k]),
                set_aside_reason=str(r.clean.reason[k]),
                n_positions=int(t.n_positions[k]),
                duration_s=_short(duration[k]),
                net_advance_um=_short(net[k]),
                path_um=_short(speed[k] * duration[k]),
                speed_um_s=_short(speed[k]),
                speed_error_um_s=_short(error[k]),
                rotational_diffusion_rad2_s=_short(turning[0, k]),
                rotational_diffusion_low_rad2_s=_short(turning[1, k]),
                rotational_diffusion_high_rad2_s=_short(turning[2, k]),
                rotational_diffusion_problem=str(problem[k]),
                gliding_probability=_short(r.clean.gliding_probability[k]),
                length_um=_short(length[k]),
            )
            for k in range(t.n_tracks)
        ]
    return tuple(out)


def _median_lengths(recording: CleanRecording) -> Floats:
    """Median length of the contour of each track, (m,); NaN without one."""
    t = recording.clean.tracks
    out = np.full(t.n_tracks, np.nan)
    if t.length_um is not None:
        for k in range(t.n_tracks):
            own = t.length_um[t.rows(k)]
            own = own[np.isfinite(own)]
            out[k] = np.median(own) if len(own) else np.nan
    return out


def _short(value: float) -> float:
    return float(f"{value:.5g}")


def drawn(recordings: Sequence[CleanRecording], *, most: int) -> tuple[DrawnTrack, ...]:
    """Tracks thinned for drawing, at most so many, evenly taken."""
    every = [(r, k) for r in recordings for k in range(r.clean.tracks.n_tracks)]
    every = [(r, k) for r, k in every if r.clean.reason[k] not in (SHORT, UNCLEAR)]
    chosen = np.unique(np.linspace(0, len(every) - 1, min(most, len(every))).round().astype(int))
    return tuple(_drawn(*every[i]) for i in chosen)


def _drawn(r: CleanRecording, k: int) -> DrawnTrack:
    t = r.clean.tracks
    rows = t.rows(k)
    x, y = t.x_um[rows], t.y_um[rows]
    # A point every 0.7 % of the field is as fine as the drawing.
    path = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(x), np.diff(y)))])
    step = 0.007 * max(r.field_um)
    wanted = np.arange(0.0, path[-1] + step, step)
    keep = np.unique(np.minimum(np.searchsorted(path, wanted), len(x) - 1))
    return DrawnTrack(
        recording=r.recording,
        track=str(t.label[k]),
        reason=str(r.clean.reason[k]),
        x_um=tuple(np.round(x[keep], 2).tolist()),
        y_um=tuple(np.round(y[keep], 2).tolist()),
    )


def spread_by_level(combined: Combined, columns: Mapping[str, int]) -> tuple[LevelSpread, ...]:
    """What each level brings to the standard error of the main quantities, relative to them."""
    return tuple(
        LevelSpread(
            quantity=quantity,
            level=level,
            units=combined.level_units[level],
            relative_error=float(error[columns[name]] / combined.value[columns[name]]),
        )
        for quantity, name in _SPREAD_OF.items()
        if name in columns and combined.value[columns[name]] > 0
        for level, error in combined.level_error.items()
    )


def generalises(
    condition: str,
    combined: Combined,
    preparations: Sequence[str],
    borrowed: Mapping[str, BorrowedSpread] | None = None,
) -> str:
    """A few sentences: to what the intervals generalise, and what they borrow for it."""
    days, n_chambers = combined.level_units["days"], combined.level_units["chambers"]
    few = ""
    if not borrowed and (days if combined.covers == "days" else n_chambers) == 2:
        few = " Two say little of their spread: a third would make the intervals far narrower."
    loans = "".join(f" {text}" for text in _loans(condition, borrowed or {}, one_day=days == 1))
    if combined.covers == "days":
        named = {p for p in preparations if p}
        if len(named) == 1 and all(preparations):
            return (
                f"The intervals cover other days with the same preparation ({named.pop()}): "
                f"{days} days repeat the day, not the preparation.{loans}{few}"
            )
        return f"The intervals cover other days like these {days}.{loans}{few}"
    if combined.covers == "chambers":
        if any(spread.covers == "days" for spread in (borrowed or {}).values()):
            return (
                f"The {n_chambers} chambers are of one day.{loans} All other intervals cover other "
                "chambers of that day, not other days. Film on further days to do without what is "
                "borrowed."
            )
        return (
            f"The {n_chambers} chambers are of one day: the intervals cover other chambers of that "
            f"day, not other days.{loans} Film on further days to say more.{few}"
        )
    return (
        "There is one chamber, so no interval can be given: how much another chamber would differ "
        "has not been seen. Film at least a second chamber, better a second day."
    )


def _loans(condition: str, borrowed: Mapping[str, BorrowedSpread], *, one_day: bool) -> list[str]:
    """What is borrowed from whom, for which quantities, and what that takes for granted."""
    by_source: dict[tuple[str, tuple[str, ...]], list[str]] = {}
    for key in QUANTITIES:
        if key in borrowed:
            loan = borrowed[key].covers, borrowed[key].sources
            by_source.setdefault(loan, []).append(QUANTITIES[key].label)
    out = []
    for (covers, sources), labels in by_source.items():
        what, whom = _listed(labels), _listed(sources)
        if covers == "chambers":
            out.append(f"How far chambers differ is pooled with {whom} for {what}.")
        elif one_day:
            out.append(
                f"The intervals of {what} cover other days all the same: how far days differ is "
                f"borrowed from {whom}. That holds if {condition} differs from day to day as "
                f"{whom} does, which one day cannot show."
            )
        else:
            out.append(f"How far days differ is borrowed from {whom} for {what}.")
    return out


def _listed(names: Sequence[str]) -> str:
    return ", ".join(names[:-1]) + (" and " if len(names) > 1 else "") + names[-1]


def model_checks(
    innovation: Floats, combined: Combined, columns: Mapping[str, int], *, model: str = "active"
) -> tuple[ModelCheck, ...]:
    """Are the likelihood's innovations white and normal, and does the MSD say the same?

    Tolerances are of practical size: among 40,000 positions any trifle is significant.

    Parameters
    ----------
    innovation : (n, 2) array
        Along and across the path, normalised; NaN at the start of each track.
    """
    there = np.asarray(np.isfinite(innovation).all(axis=1))
    z = innovation[there]
    if len(z) < _FEWEST_INNOVATIONS:
        return ()
    follows = there[1:] & there[:-1]
    lag_one = float(np.mean(innovation[1:][follows] * innovation[:-1][follows]))
    square = float(np.mean(z**2))
    white = (
        ModelCheck(
            name="size of innovations",
            value=_short(square),
            expected=1.0,
            tolerance=0.1,
            meaning="Mean square of what each position adds to the prediction from those before "
            "it, over what the model expects.",
        ),
        ModelCheck(
            name="memory of innovations",
            value=_short(lag_one / square),
            expected=0.0,
            tolerance=0.1,
            meaning="Correlation of successive innovations; sideways motion, pauses or circling "
            "leave one.",
        ),
        ModelCheck(
            name="tails of innovations",
            value=_short(float(np.mean(z**4)) / square**2),
            expected=3.0,
            tolerance=1.5,
            meaning="Fourth moment over the squared second, 3 for a normal distribution; pauses "
            "and mixtures of filaments make it larger.",
        ),
    )
    if model != "active":  # of which the fit to the MSD knows nothing
        return white
    return white + _second_opinion(combined, columns)


def _second_opinion(combined: Combined, columns: Mapping[str, int]) -> tuple[ModelCheck, ...]:
    """Does the fit to the mean squared displacement say the same?"""
    v, v_msd = (float(combined.value[columns[n]]) for n in ("speed", "msd_speed"))
    d, d_msd = (
        float(combined.value[columns[n]])
        for n in ("rotational_diffusion", "msd_rotational_diffusion")
    )
    sure_v = max(0.03, 3 * _relative_error(combined, columns, "msd_speed"))
    sure_d = max(0.3, 3 * _relative_error(combined, columns, "msd_rotational_diffusion"))
    return (
        ModelCheck(
            name="speed from the MSD",
            value=_short(v_msd / v) if sure_v < 1 and v > 0 else NAN,
            expected=1.0,
            tolerance=sure_v,
            meaning="Speed fitted to the mean squared displacement, over that of the likelihood.",
        ),
        ModelCheck(
            name="D_r from the MSD",
            value=_short(d_msd / d) if sure_d < 1 and d > 0 else NAN,
            expected=1.0,
            tolerance=sure_d,
            meaning="Rotational diffusion fitted to the mean squared displacement, over that of "
            "the likelihood.",
        ),
    )


def _relative_error(combined: Combined, columns: Mapping[str, int], name: str) -> float:
    """Error that the tracks of a condition bring to one of its values; 0 if unknown."""
    error = combined.level_error["tracks"][columns[name]] / combined.value[columns[name]]
    return float(error) if np.isfinite(error) else 0.0


def problems(
    *,
    estimates: Mapping[str, Estimate],
    combined: Combined,
    columns: Mapping[str, int],
    msd: Sequence[Curve],
    fit_problems: Sequence[str],
    undecided: int,
    checks: Sequence[ModelCheck] = (),
    model: str = "active",
    left_out: int = 0,
    heading_sd: float = 0.0,
    from_contours: bool = False,
    kept: int = 0,
) -> list[str]:
    """What a reader must know before quoting the numbers, in plain words."""
    out = [f"Not fitted, and left out of the means: {problem}." for problem in fit_problems]
    out += _misfit(msd, model)
    if model == "active":
        out += _headings_disagree(estimates, combined, columns)
    out += [
        f"The {model} model does not describe these tracks: {check.name} {check.value:.3g}, "
        f"expected {check.expected:g} within {check.tolerance:.2g}. {check.meaning} Look at the "
        "tracks before quoting the numbers."
        for check in checks
        if not check.holds
    ]
    if from_contours:
        out.append(
            "D_r was read from contours of filaments in a video, which smooth the path over about "
            "0.25 µm. In simulated videos it came out 5 to 30 % too low, most where filaments "
            "turn much and are short; speeds were right. Quote D_r and persistence lengths of such "
            "recordings as rough."
        )
    if heading_sd > _VAGUE_HEADING:
        out.append(
            f"From frame to frame the heading is known to ±{heading_sd:.2g} rad only: steps are "
            "short against the localization error, or the path turns much between frames. "
            "Simulated, D_r then comes out some 4 % too large and scatters half as much again as "
            "it must; "
            "brighter filaments or a shorter frame interval would resolve it."
        )
    if left_out > 0.05 * kept:
        out.append(
            f"{left_out} of {kept} kept tracks are so unlike the others that they did not enter "
            "the likelihood. Look at them: floating filaments, or two joined to one track?"
        )
    if undecided > _FEW_UNDECIDED * kept:
        out.append(
            f"{undecided} {'track says' if undecided == 1 else 'tracks say'} too little of whether "
            "they glide: they are left out of the motile fraction (clean.odds)."
        )
    return out


def _misfit(msd: Sequence[Curve], model: str) -> list[str]:
    """The fitted curve should pass through its points to 5 %, which is beyond any use of it."""
    worst, at = 0.0, 0.0
    for c in msd:
        for lag, value, fit, used in zip(c.lag_s, c.value, c.model, c.fitted, strict=True):
            if used and fit > 0 and abs(np.log(value / fit)) > abs(worst):
                worst, at = float(np.log(value / fit)), lag
    if abs(worst) < 0.05:
        return []
    return [
        f"The mean squared displacement departs from the fitted curve by {abs(worst):.0%} at a lag "
        f"of {at:.3g} s: the motion is not that of the {model} model (pauses, circling, or several "
        "populations), or there are too few tracks. Look at the tracks before quoting D_r."
    ]


def _headings_disagree(
    estimates: Mapping[str, Estimate], combined: Combined, columns: Mapping[str, int]
) -> list[str]:
    from_msd = estimates["rotational_diffusion_rad2_s"].value
    from_heading = combined.value[columns["heading_diffusion"]]
    if not (from_msd > 0 and from_heading > 0):
        return []
    ratio = float(from_heading / from_msd)
    difference = (
        combined.draws[:, columns["heading_diffusion"]]
        - combined.draws[:, columns["rotational_diffusion"]]
    )
    # Without replicates nothing says how sure the difference is; then only a gross one counts.
    error = float(difference.std()) if np.isfinite(difference).all() else 0.0
    sure = abs(from_heading - from_msd) > 3 * error
    if not (sure and not 1 / 1.5 < ratio < 1.5):
        return []
    return [
        f"The heading correlation gives a rotational diffusion {ratio:.2g} times that of the mean "
        "squared displacement. Sideways motion, circling or a mixture of filaments can do that; "
        "do not quote D_r without looking at the tracks."
    ]


_ALSO = {
    "passive": "The tracks show no directed motion: free diffusion was fitted to their "
    "displacements by maximum likelihood. ",
    "circling": "Each filament has a turning rate of its own. ",
    "pausing": "Filaments pause at random with their heading frozen and run on, both at fitted "
    "rates; v and D_r are those while running. ",
}
_FITTED = {
    "likelihood": "fitted to each chamber by maximum likelihood (a Gaussian filter over position, "
    "heading and the speed of each filament), the speed averaged over filament-frames; the mean "
    "squared displacement up to a lag of {longest:.3g} s serves as a check.",
    "msd": "fitted on the logarithmic scale to the mean squared displacement of each chamber up to "
    "a lag of {longest:.3g} s; pairs of positions were weighted for the edges of the field.",
}


def methods(
    *,
    recordings: Sequence[CleanRecording],
    counted: Counts,
    longest_lag_s: float,
    generalises: str,
    level: float,
    resamples: int,
    version: str,
    method: str,
    model: str = "active",
) -> str:
    """A methods paragraph to quote."""
    also = "".join(said for name, said in _ALSO.items() if name in model)
    rates = sorted({f"{r.frame_s:.4g}" for r in recordings})
    aside = ", ".join(f"{n} {name}" for name, n in counted.set_aside.items() if n) or "none"
    return (
        f"Tracks of {counted.recordings} recordings ({counted.chambers} chambers, {counted.days} "
        f"days; frame interval {' and '.join(rates)} s) were analysed with glidefit {version}. "
        f"Of {counted.tracks_seen} tracks {counted.tracks_kept} were kept; set aside: {aside}. "
        "Speed v and rotational diffusion D_r are those of the active Brownian model in two "
        "dimensions, with diffusion along the heading, localization error and motion blur, "
        f"{_FITTED[method].format(longest=longest_lag_s)} {also}"
        "Persistence length is v/D_r (decay of the heading correlation along the path), path "
        "persistence length v/(2 D_r) (worm-like chain in two dimensions). Chamber values were "
        "averaged within days and days within the condition. Intervals at the "
        f"{level:.0%} level come from {resamples} resamples of whole units of the highest level "
        f"that repeats, with Student's t for its degrees of freedom. {generalises}"
    )


def condition_result(
    *,
    condition: str,
    slug: str,
    control: bool,
    recordings: Sequence[CleanRecording],
    level: float,
    problem: str,
) -> ConditionResult:
    """A condition of which nothing was left to fit."""
    drawn_tracks = drawn(recordings, most=100)
    return ConditionResult(
        condition=condition,
        slug=slug,
        control=control,
        model="none",
        counts=counts(recordings),
        estimates=all_estimates({}, level=level),
        problems=(problem,),
        msd=(),
        heading_correlation=(),
        chambers=chambers(recordings, {}),
        tracks=tracks(recordings, {}, {}),
        drawn=drawn_tracks,
        time_points=(),
        spread=(),
        generalises="Nothing was left to fit.",
        longest_lag_s=NAN,
        heading_diffusion_rad2_s=NAN,
        methods="Nothing was left to fit.",
    )
