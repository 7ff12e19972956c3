"""Agreement of people who sort: what each question of the study comes to, by appraiser and together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from ..spc.studies.agreement import AgreementShare, AgreementStudy, AppraiserAgreement
from . import rows, scale
from .svg import LEFT, RIGHT, SOFT, Paper
from .text import clean, counted, cut, minus, wrap

_SMALL = 11.0
_MOST_ROWS = 20
_MOST_NAMED = 16


@dataclass(frozen=True, slots=True, kw_only=True)
class Agreed:
    """What a picture of an agreement study shows; disputed: the items that were not all rated alike, or not right."""

    name: str | None
    study: AgreementStudy
    disputed: Sequence[str]
    right_known: bool
    cautions: Sequence[str] = ()


def draw(agreed: Agreed) -> str:
    """The picture of an agreement study, as SVG."""
    paper, study = Paper(), agreed.study
    title = clean(agreed.name or "") or "Agreement of appraisers"
    paper.text(LEFT, 30, cut(title, 16, RIGHT - LEFT), size=16, bold=True)
    trials = "once" if study.trials == 1 else "twice" if study.trials == 2 else f"{study.trials} times"
    what = (
        f"Agreement of appraisers · {counted(study.items, 'item')}, {counted(study.appraisers, 'appraiser')}, "
        f"each rated {trials}"
    )
    paper.text(LEFT, 50, cut(what, 12, RIGHT - LEFT), colour=SOFT)
    verdict = _verdict(study)
    y = 72.0
    for line in wrap(verdict, 13, RIGHT - LEFT):
        paper.text(LEFT, y, line, size=13, bold=True)
        y += 18
    told = [f"{title}. {what}. {verdict}"]
    to_x = scale.Linear(0.0, 100.0, LEFT + 150, RIGHT - 236)
    confidence = f"{100 * study.confidence:g} %"
    paper.text(LEFT, y + 8, f"Shares in percent, each with its {confidence} interval", colour=SOFT)
    y += 10
    for question, answers in _questions(study):
        hidden = len(answers) - _MOST_ROWS
        paper.text(LEFT, y + 20, question)
        told.append(f"{question}:")
        told += [f"{one.name} {one.written}." for one in answers]
        y = rows.draw(paper, answers[:_MOST_ROWS], y + 20, to_x)
        if hidden > 0:
            words = f"And {counted(hidden, 'appraiser')} more, in the answer."
            paper.text(LEFT + 8, y + 8, words, size=_SMALL, colour=SOFT)
            y += 14
    kappas = _kappas(study)
    for line in wrap(kappas, 12, RIGHT - LEFT):
        y += 18
        paper.text(LEFT, y, line)
    told.append(kappas)
    items = _disputed(agreed)
    for line in wrap(items, 12, RIGHT - LEFT):
        y += 18
        paper.text(LEFT, y, line)
    told.append(items)
    if agreed.cautions:
        note = f"{counted(len(agreed.cautions), 'caution')} with this answer: {', '.join(agreed.cautions)}."
        y = paper.lines(LEFT, y + 22, wrap(note, _SMALL, RIGHT - LEFT), size=_SMALL, colour=SOFT) - 15
    return paper.finish(y + 16, f"{title}: agreement", " ".join(told))


def _share(name: str, share: AgreementShare) -> rows.Row:
    of = f"{share.count:,} of {share.opportunities:,}"
    if share.proportion is None:
        return rows.Row(name, None, None, None, of)
    low, high = (None if end is None else 100 * end for end in (share.lower, share.upper))
    written = f"{100 * share.proportion:.3g} %"
    if low is not None and high is not None:
        written += f" ({low:.3g} to {high:.3g})"
    return rows.Row(name, 100 * share.proportion, low, high, f"{written}, {of}")


def _questions(study: AgreementStudy) -> list[tuple[str, list[rows.Row]]]:
    """Each question that the study answers, with a row for each appraiser and for all."""

    def of(share: str, one: AppraiserAgreement) -> AgreementShare | None:
        found: AgreementShare | None = getattr(one, share)
        return found

    asked = (
        ("repeated", "Sorts an item alike every time", None),
        ("between", "All appraisers alike every time", study.between),
        ("matched", "Agrees with the reference every time", study.all_matched),
        ("misses", "Lets an item through that should be rejected", None),
        ("false_alarms", "Rejects an item that is good", None),
    )
    found = []
    for share, question, together in asked:
        answers = [
            _share(one.appraiser, own)
            for one in study.by_appraiser
            if share != "between" and (own := of(share, one)) is not None
        ]
        if together is not None and (len(study.by_appraiser) > 1 or not answers):
            answers.insert(0, _share("all", together))
        if answers:
            found.append((question, answers))
    return found


def _verdict(study: AgreementStudy) -> str:
    """The shares that decide: with the reference if there is one, else among themselves."""

    def told(share: AgreementShare) -> str:
        if share.proportion is None or share.lower is None or share.upper is None:
            return f"{share.count:,} of {share.opportunities:,} items"
        return f"{100 * share.proportion:.3g} % of items ({100 * share.lower:.3g} to {100 * share.upper:.3g})"

    if study.all_matched is not None and len(study.by_appraiser) > 1:
        return f"All appraisers are right every time on {told(study.all_matched)}."
    one = study.by_appraiser[0]
    if one.matched is not None and len(study.by_appraiser) == 1:
        return f"Right every time on {told(one.matched)}."
    if study.between is not None:
        return f"All appraisers rate alike every time on {told(study.between)}."
    if one.repeated is not None:
        return f"Rated alike every time: {told(one.repeated)}."
    return "See the shares below."


def _kappa(value: float | None) -> str:
    return "not defined" if value is None else minus(f"{value:.2f}")


def _kappas(study: AgreementStudy) -> str:
    parts = [f"Agreement beyond chance (kappa, 1 being complete): all ratings {_kappa(study.overall.kappa)}"]
    parts += [
        f"{clean(one.appraiser)} against the reference {_kappa(one.against_reference.kappa)}"
        for one in study.by_appraiser[:8]
        if one.against_reference is not None
    ]
    if len(study.pairs) <= 6:
        parts += [
            f"{clean(one.first)} with {clean(one.second)} {_kappa(one.cohen.kappa)}" for one in study.pairs
        ]
    return "; ".join(parts) + "."


def _disputed(agreed: Agreed) -> str:
    """The items to look at again."""
    named = [clean(one) for one in agreed.disputed[:_MOST_NAMED]]
    right = " and right" if agreed.right_known else ""
    if not named:
        return f"Every item was rated alike{right} by all, every time."
    more = len(agreed.disputed) - len(named)
    rest = f" and {more:,} more" if more else ""
    many = counted(len(agreed.disputed), "item")
    return f"Look again at {many} not rated alike{right} every time: {', '.join(named)}{rest}."
