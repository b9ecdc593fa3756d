"""The pages: one for each condition and one that holds all of them side by side.

Pages stand alone: no file, font or script from elsewhere. Everything a user wrote passes through
autoescaping and loses its control characters on the way.
"""

from __future__ import annotations

import base64
import functools
import hashlib
import math
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from glidefit.results import ConditionResult, StudyResult
from glidefit.writing import page_rows
from glidefit.writing.colours import DARK, LIGHT, page_colour, style_variables
from glidefit.writing.comparison_rows import said
from glidefit.writing.comparison_words import response_sentence
from glidefit.writing.day_figures import day_figure
from glidefit.writing.figures import condition_figures, overview, overview_caption
from glidefit.writing.rounding import percent, rounded, significant
from glidefit.writing.set_aside_rules import outcomes
from glidefit.writing.wording import counted, named, visible

_TEMPLATES = Path(__file__).parent / "templates"


def condition_page(study: StudyResult, condition: ConditionResult) -> str:
    """The page of one condition as HTML; the same results give the same bytes.

    Parameters
    ----------
    study : StudyResult
        Knows the recordings, the settings and where all came from.
    condition : ConditionResult
        One of the conditions of the study.
    """
    recordings = [r for r in study.recordings if r.condition == condition.condition]
    figures = condition_figures(condition, recordings)
    rows = page_rows.recording_rows(recordings, study.settings)
    return render(
        "condition.html.j2",
        study=study,
        condition=condition,
        summary=page_rows.summary(condition),
        level=_level([condition]),
        main=page_rows.main_estimates(condition),
        others=page_rows.other_estimates(condition),
        outcomes=outcomes(condition.counts, study.settings),
        figures=figures,
        checks=page_rows.check_rows(condition.model_checks),
        evidence=page_rows.evidence_rows(condition.model_evidence),
        spread=page_rows.spread_tables(condition.spread),
        variation=page_rows.variation_tables(condition.variation),
        recordings=rows,
        own=page_rows.own_values(condition.tracks),
        troubled=sum(bool(row.problems) for row in rows),
        calibration=page_rows.shared_calibration(rows),
        chosen=[row for row in study.settings if row.source != "default"],
        defaults=[row for row in study.settings if row.source == "default"],
    )


def index_page(study: StudyResult) -> str:
    """The page that holds all conditions side by side, as HTML."""
    rows = [
        (c, page_rows.main_estimates(c), page_rows.problem_count(c, study.recordings))
        for c in study.conditions
    ]
    return render(
        "index.html.j2",
        study=study,
        rows=rows,
        level=_level(study.conditions),
        tracks_kept=sum(c.counts.tracks_kept for c in study.conditions),
        tracks_seen=sum(c.counts.tracks_seen for c in study.conditions),
        figures=overview(study.conditions),
        caption=overview_caption(study.conditions),
        problems=[*study.problems, *(p for c in study.day_charts for p in c.problems)],
        said=said(study),
        responses=[response_sentence(curve) for curve in study.responses],
        day_charts=[day_figure(chart, number=n) for n, chart in enumerate(study.day_charts)],
        day_rules=study.day_charts[0].rules if study.day_charts else "",
    )


def _level(conditions: Any) -> str:
    """Confidence level of the intervals: "95 %"; several if they differ."""
    levels = sorted(
        {
            estimate.level
            for condition in conditions
            for estimate in condition.estimates.values()
            if math.isfinite(estimate.low) or math.isfinite(estimate.high)
        }
    )
    return " and ".join(map(percent, levels))


def render(template: str, **values: Any) -> str:
    """A page from its template."""
    return _environment().get_template(template).render(**values)


@functools.cache
def _environment() -> jinja2.Environment:
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_TEMPLATES),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
        finalize=_shown,
    )
    environment.filters |= {
        "counted": counted,
        "named": named,
        "svg": Markup,
        "colour": page_colour,
        "digits": significant,
        "percent": percent,
        "rounded": rounded,
    }
    script = (_TEMPLATES / "sort.js").read_text(encoding="utf-8").strip()
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    environment.globals |= {
        "style": Markup(_style_sheet()),
        "script": Markup(script),
        "script_hash": f"sha256-{digest}",
    }
    return environment


def _style_sheet() -> str:
    sheet = (_TEMPLATES / "page.css").read_text(encoding="utf-8")
    dark = (
        f"@media screen and (prefers-color-scheme: dark) {{ :root {{ {style_variables(DARK)} }} }}"
    )
    return f":root {{ {style_variables(LIGHT)} }}\n{dark}\n{sheet}"


def _shown(value: Any) -> Any:
    """What an expression of a template becomes before it is escaped."""
    return visible(value) if isinstance(value, str) and not isinstance(value, Markup) else value
