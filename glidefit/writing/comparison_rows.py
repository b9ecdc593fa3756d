"""The rows of the page of comparisons: sentences, the table, how each pair was judged."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

from glidefit.results import Comparison, ConditionPair, SideLook, StudyResult
from glidefit.writing import comparison_words as words
from glidefit.writing.rounding import NONE, Rounded, probability, rounded
from glidefit.writing.wording import counted, named


@dataclass(frozen=True, slots=True, kw_only=True)
class Said:
    """One condition against its reference in plain words."""

    condition: str
    reference: str
    slug: str  # "" if the condition has no page
    verdict: str
    sentences: tuple[str, ...]
    problems: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class TableRow:
    """One comparison of the table."""

    condition: str
    reference: str
    quantity: str
    primary: bool
    effect: str
    shown: Rounded
    alike: str  # "yes", "no" or "–"
    alike_interval: str
    p_value: str
    p_adjusted: str
    p_permutation: str
    problem: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LookRow:
    """The ratio of speeds in another way."""

    name: str
    shown: Rounded
    meaning: str


@dataclass(frozen=True, slots=True, kw_only=True)
class JudgedRow:
    """How a pair was compared."""

    condition: str
    reference: str
    note: str
    method: str
    problems: tuple[str, ...]
    looks: tuple[LookRow, ...]


def said(study: StudyResult) -> tuple[Said, ...]:
    """For each pair its sentences; the primary quantity first."""
    slugs = {c.condition: c.slug for c in study.conditions}
    family = words.family_size(study.comparisons)
    problems = {(p.condition, p.reference): p.problems for p in study.pairs}
    out = []
    for condition, reference in _pairs(study.comparisons):
        own = _of(study.comparisons, condition, reference)
        primary = next((c for c in own if c.primary), own[0])
        others = words.other_sentence([c for c in own if c is not primary])
        out.append(
            Said(
                condition=named(condition),
                reference=named(reference),
                slug=slugs.get(condition, ""),
                verdict=words.verdict(primary, family=family),
                sentences=tuple(
                    text for text in (words.main_sentence(primary, family=family), others) if text
                ),
                problems=problems.get((condition, reference), ()),
            )
        )
    return tuple(out)


def _pairs(comparisons: Sequence[Comparison]) -> list[tuple[str, str]]:
    return list(dict.fromkeys((c.condition, c.reference) for c in comparisons))


def _of(comparisons: Sequence[Comparison], condition: str, reference: str) -> list[Comparison]:
    return [c for c in comparisons if (c.condition, c.reference) == (condition, reference)]


def table_rows(comparisons: Sequence[Comparison]) -> tuple[TableRow, ...]:
    """One row a comparison, by quantity, the primary one first."""
    order = list(dict.fromkeys(c.quantity for c in comparisons))
    ordered = sorted(comparisons, key=lambda c: (not c.primary, order.index(c.quantity)))
    return tuple(_row(c) for c in ordered)


def _row(c: Comparison) -> TableRow:
    fraction = c.quantity == words.FRACTION
    known = math.isfinite(c.equivalence_low)
    permutation = probability(c.p_permutation)
    if permutation == NONE and math.isfinite(c.smallest_p_permutation):
        permutation = f"{NONE} (at least {probability(c.smallest_p_permutation)})"
    return TableRow(
        condition=named(c.condition),
        reference=named(c.reference),
        quantity=words.label(c.quantity),
        primary=c.primary,
        effect="difference" if fraction else "ratio",
        shown=rounded(*words.effect(c)),
        alike=("yes" if c.equivalent else "no") if known else NONE,
        alike_interval=rounded(words.effect(c)[0], c.equivalence_low, c.equivalence_high).interval
        if known
        else "",
        p_value=probability(words.p_value(c)),
        p_adjusted=probability(c.p_adjusted) if c.primary else "secondary",
        p_permutation=permutation,
        problem=c.problem,
    )


def judged_rows(study: StudyResult) -> tuple[JudgedRow, ...]:
    """How each pair was judged, in the order of the results."""
    rows = []
    for pair in study.pairs:
        own = _of(study.comparisons, pair.condition, pair.reference)
        primary = next((c for c in own if c.primary), None)
        rows.append(
            JudgedRow(
                condition=named(pair.condition),
                reference=named(pair.reference),
                note=pair.note,
                method=primary.method if primary else "",
                problems=pair.problems,
                looks=tuple(map(_look, pair.side_looks)),
            )
        )
    return tuple(rows)


def _look(look: SideLook) -> LookRow:
    return LookRow(
        name=look.name,
        shown=rounded(look.ratio.value, look.ratio.low, look.ratio.high),
        meaning=look.meaning,
    )


def summary(comparisons: Sequence[Comparison], pairs: Sequence[ConditionPair]) -> str:
    """What is compared with what: "3 conditions with wild type, first of all in speed"."""
    found = _pairs(comparisons)
    references = list(dict.fromkeys(reference for _, reference in found))
    primary = next((c.quantity for c in comparisons if c.primary), "")
    first = f"; tested first of all in {words.label(primary)}" if primary else ""
    if len(references) == 1:
        return f"{counted(len(found), 'condition')} with {named(references[0])}{first}."
    return f"{counted(len(found), 'pair')} of conditions{first}."
