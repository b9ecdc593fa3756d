"""The page of comparisons: sentences first, then figures, the table, and how it was judged."""

from __future__ import annotations

from glidefit.results import StudyResult
from glidefit.writing import comparison_rows as rows
from glidefit.writing.comparison_figures import ratio_caption, ratio_figures
from glidefit.writing.comparison_words import family_size
from glidefit.writing.overview_figures import overview, overview_caption
from glidefit.writing.pages import render
from glidefit.writing.rounding import percent


def comparison_page(study: StudyResult) -> str:
    """The page of comparisons as HTML; the same results give the same bytes."""
    levels = sorted({c.equivalence_level for c in study.comparisons if c.equivalence_level > 0})
    margins = sorted({c.margin for c in study.comparisons if c.margin > 0})
    return render(
        "comparison.html.j2",
        study=study,
        summary=rows.summary(study.comparisons, study.pairs),
        said=rows.said(study),
        ratios=ratio_figures(study.comparisons),
        ratio_caption=ratio_caption(study.comparisons),
        figures=overview(study.conditions),
        caption=overview_caption(study.conditions),
        rows=rows.table_rows(study.comparisons),
        judged=rows.judged_rows(study),
        level=" and ".join(percent(x) for x in sorted({c.ratio.level for c in study.comparisons})),
        alike_level=percent(levels[0]) if levels else "",
        margin=percent(margins[0]) if margins else "",
        family=family_size(study.comparisons),
    )
