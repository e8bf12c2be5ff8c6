"""What each site has to mend, as far as tables and images tell before anything is measured: lines for the terminal."""

from collections.abc import Iterable, Mapping
from typing import Any

from evenblur.codes import FLAGS, HOLDS
from evenblur.plan.drafts import Record, ScanDraft
from evenblur.plan.planning import reasons_before_measuring
from evenblur.study.reading import Study


def check_lines(
    study: Study, *, scans_intake: Mapping[str, Record], phantoms_intake: Mapping[str, Record]
) -> list[str]:
    """Lines by site: what to mend with the mend, then what to know, then the counts.

    Parameters
    ----------
    study
        The study's settings and tables.
    scans_intake, phantoms_intake
        Intake records by scan key and by phantom label.
    """
    drafts = reasons_before_measuring(study, scans_intake=scans_intake, phantoms_intake=phantoms_intake)
    sites = list(dict.fromkeys(row.site for row in study.setups))
    lines = [
        f"Study files: no fault. {_count(len(sites), 'site')}, {_count(len(study.setups), 'setup')}, "
        f"{_count(len(study.phantoms), 'phantom')}, {_count(len(study.scans), 'scan')}."
    ]
    for site in sites:
        lines += _site_lines(site, study, drafts, phantoms_intake)
    return [*lines, "", *_closing_lines(study, drafts, phantoms_intake)]


def _site_lines(site: str, study: Study, drafts: list[ScanDraft], phantoms_intake: Mapping[str, Record]) -> list[str]:
    setups = [row.setup for row in study.setups if row.site == site]
    mend: list[str] = []
    for setup in setups:
        if not _has_width(study, setup):
            what = f"setup {setup}: it has neither a phantom in use nor a declared width"
            mend += _item(what, [("send a phantom scan, or declare the width with its source", "no_phantom_session")])
    for row in study.phantoms:
        if row.setup in setups and row.use == "yes":
            record = phantoms_intake[row.phantom]
            for code, problem in zip(record["holds"], record["problems"], strict=True):
                what, _, asked = problem.partition("; ")
                mend += _item(f"phantom {row.phantom}, {row.image}: {what}", [(asked, code)])
    for draft in drafts:
        if draft.row.setup in setups and draft.row.use == "yes":
            for code in draft.reasons:
                note = draft.notes.get(code)
                what = f"{HOLDS[code].meaning} ({note})" if note else HOLDS[code].meaning
                mend += _item(f"scan {draft.row.entities}, {draft.row.image}: {what}", [(HOLDS[code].mend, code)])
    know = list(_to_know(setups, drafts, study, phantoms_intake))
    things = sum(not line.startswith("      ") for line in mend)
    head = f"Site {site}: {_count(things, 'thing')} to mend" if things else f"Site {site}: nothing to mend"
    return ["", head, *mend, *(["  To know:"] if know else []), *know]


def _has_width(study: Study, setup: str) -> bool:
    row = study.by_setup[setup]
    declared = row.declared_in_plane_mm is not None or row.declared_axial_mm is not None
    return declared or any(phantom.setup == setup and phantom.use == "yes" for phantom in study.phantoms)


def _item(what: str, mends: Iterable[tuple[str, str]]) -> list[str]:
    return [f"  - {what}", *(f"      mend: {_plain(mend)} [{code}]" for mend, code in mends)]


def _to_know(
    setups: list[str], drafts: list[ScanDraft], study: Study, phantoms_intake: Mapping[str, Record]
) -> Iterable[str]:
    """Flags, gathered: one line a setup and code, with the sentence where all agree in it."""
    for setup in setups:
        own = [draft for draft in drafts if draft.row.setup == setup]
        yield from _gathered(setup, "scans", [draft.flags for draft in own])
        rows = [row for row in study.phantoms if row.setup == setup and row.use == "yes"]
        yield from _gathered(setup, "phantoms", [phantoms_intake[row.phantom]["flags"] for row in rows])
        unused = [draft.row.entities for draft in own if draft.row.use == "no"]
        unused += [row.phantom for row in study.phantoms if row.setup == setup and row.use == "no"]
        if unused:
            yield f"  - {setup}: out of use by decision: {', '.join(unused)}"


def _gathered(setup: str, kind: str, flags: list[Any]) -> Iterable[str]:
    texts: dict[str, list[str]] = {}
    for found in flags:
        for code in dict.fromkeys(flag["code"] for flag in found):
            texts.setdefault(code, []).append("; ".join(flag["text"] for flag in found if flag["code"] == code))
    for code in [code for code in FLAGS if code in texts]:
        said = list(dict.fromkeys(texts[code]))
        what = said[0] if len(said) == 1 else FLAGS[code].meaning
        yield f"  - {setup}, {len(texts[code])} of {len(flags)} {kind}: {what} [{code}]"


def _closing_lines(study: Study, drafts: list[ScanDraft], phantoms_intake: Mapping[str, Record]) -> list[str]:
    used = [row for row in study.phantoms if row.use == "yes"]
    sound = sum(not phantoms_intake[row.phantom]["holds"] for row in used)
    lines = [f"Phantoms: {sound} of {len(used)} in use can be measured."] if used else ["Phantoms: none in use."]
    if not study.scans:
        return [*lines, "Scans: the table has no rows, so phantoms are measured and planned, and nothing is smoothed."]
    held = sum(bool(draft.reasons) for draft in drafts)
    lines.append(f"Scans: {len(drafts) - held} of {len(drafts)} can be used, {held} are held.")
    return [*lines, "Widths are not measured yet: the plan may hold more (target `plan`)."]


def _count(number: int, thing: str) -> str:
    return f"{number} {thing}" if number == 1 else f"{number} {thing}s"


def _plain(text: str) -> str:
    return text.replace("`", "")
