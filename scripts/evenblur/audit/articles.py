"""A period by itself, as report and site record show it: its checks, profiles and pictures."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from markupsafe import Markup

from evenblur.audit import model
from evenblur.audit.inputs import AuditInput, Row
from evenblur.audit.panels import Panel, profile_panel
from evenblur.audit.self_checks import SelfCheck, self_checks
from evenblur.audit.slices import Couple, Triple, slice_couple, slice_triple

PICTURES_BYTES = 3_000_000
"""What the profiles and pictures of all periods may take of the report; the site records show the rest."""


@dataclass(frozen=True)
class Drawn:
    """A profile: whose it is, and its drawing."""

    title: str
    subtitle: str
    axis: str
    svg: Markup


@dataclass(frozen=True)
class Article:
    """One period with everything that tells how far its widths can be trusted."""

    period: model.PeriodRecord
    checks: tuple[SelfCheck, ...]
    profiles: tuple[Drawn, ...] = ()
    couples: tuple[Couple, ...] = ()
    triples: tuple[Triple, ...] = ()
    left_out: bool = field(default=False)

    @property
    def size(self) -> int:
        """Bytes that its drawings take, about."""
        drawings = [len(one.svg) for one in self.profiles]
        sets = [one.pictures for one in self.couples] + [one.pictures for one in self.triples]
        return sum(drawings) + sum(len(picture.address) for some in sets for picture in some)

    @property
    def pressing(self) -> bool:
        """Whether a reader should look at it before others."""
        return self.period.verdict != "pass" or bool(self.period.stands_out or self.period.flags)


def articles(periods: Sequence[model.PeriodRecord], audit: AuditInput) -> list[Article]:
    """One article a period, in the order of the periods."""
    checks = {check.phantom: check for check in self_checks(audit)}
    return [_article(period, audit, checks, number) for number, period in enumerate(periods, start=1)]


def bounded(all_articles: Sequence[Article], *, most: int = PICTURES_BYTES) -> list[Article]:
    """The same articles, drawings left out where they would be too many: pressing periods keep theirs first."""
    order = sorted(range(len(all_articles)), key=lambda index: not all_articles[index].pressing)
    kept, used = set(), 0
    for index in order:
        used += all_articles[index].size
        if used <= most:
            kept.add(index)
    return [
        article if index in kept else Article(article.period, article.checks, left_out=True)
        for index, article in enumerate(all_articles)
    ]


def _article(period: model.PeriodRecord, audit: AuditInput, checks: Mapping[str, SelfCheck], number: int) -> Article:
    achieved = audit.achieved.get((period.setup, period.phantom_session)) or {}
    profiles, couples, triples = [], [], []
    for label in period.phantoms:
        record = audit.resolution.get(label) or {}
        kind = str(record.get("kind") or "").replace("_", " ")
        panel = _panel(period, label, kind, record, achieved)
        if panel is not None:
            svg = Markup(profile_panel(panel, name=f"profile{number}-{label}"))  # drawn by us; its texts are escaped
            profiles.append(Drawn(label, kind, _axis(panel), svg))
        pair = (achieved.get("pictures") or {}).get(label)
        if pair:
            couples.append(slice_couple(pair, title=label, subtitle=kind))
        for entry in (record.get("fit") or {}).get("slices") or ():
            triples.append(slice_triple(entry, title=label, subtitle=kind))
    mine = tuple(checks[label] for label in period.phantoms if label in checks)
    return Article(period, mine, tuple(profiles), tuple(couples), tuple(triples))


def _panel(period: model.PeriodRecord, label: str, kind: str, record: Row, achieved: Row) -> Panel | None:
    pair = (achieved.get("profiles") or {}).get(label) or {}
    before = pair.get("before") or (record.get("fit") or {}).get("profile")
    if not before and not pair.get("after"):
        return None
    return Panel(period.name, f"{label}, {kind}" if kind else label, before, pair.get("after"))


def _axis(panel: Panel) -> str:
    shown: Mapping[str, Any] = panel.before or panel.after or {}
    label, unit = (str(shown.get(key) or "") for key in ("label", "unit"))
    return f"{label} ({unit})" if unit else label
