"""What somebody has to answer or mend, each as a sentence that can be sent to the site unchanged."""

from collections.abc import Iterable

from evenblur.audit.inputs import AuditInput, Row, stray_files
from evenblur.audit.own_words import OwnWords, words_by_site
from evenblur.audit.periods import Direction, Period, flag_texts, odd_versions, periods_of, site_of
from evenblur.audit.tables import number, scan_flags
from evenblur.codes import FLAGS, HOLDS, meaning

QUERIES_COLUMNS = ("site", "item", "code", "sentence", "who_acts")

WORDS = {"in_plane": "in-plane", "axial": "axial"}

# What to ask where the list of codes tells the keepers of the tables what to do: a site knows no table of ours.
_ASKED_OF_SITES = {
    "phantom_expired": "send a newer phantom scan, or tell us why the old one still speaks for this scan",
    "no_phantom_session": "send a phantom scan made with this setup, or correct the date of the scan or of the phantom",
    "image_missing": "send the image, or tell us under which name you sent it",
    "radius_differs": "confirm the phantom’s inner radius and the voxel size of the image",
    "length_differs": "confirm the phantom’s inner length and the slice thickness of the image",
    "source_large": "confirm the source’s diameter, or measure with a smaller source",
    "sphere_not_found": "confirm the spheres’ inner diameters, and that every sphere was filled",
    "sphere_differs": "confirm the spheres’ inner diameters, and that no sphere held an air bubble",
    "contrast_differs": "confirm the activities that spheres and background were filled with",
    "reconstruction_differs": "tell us how both were reconstructed: the width speaks for the phantom’s reconstruction",
    "voxel_size_differs": "tell us whether both were reconstructed alike",
    "flipped_axes": "tell us how you export images, for your scans may be flipped too",
}

# Flags that tell a reader something but ask nothing of anybody.
_NOTES = frozenset(
    {
        "activity_at_axial_end",
        "field_short",
        "matrix_differs",
        "negative_voxels",
        "oblique_grid_used",
        "validity_extended",
    }
)
# Flags that scans of a setup share: one question a setup, not one a scan.
_GATHERED = ("reconstruction_unverified", "units_unstated", "units_differ")
# Flags of a period that its verdict's own sentence, or a phantom's row, asks about already.
_ASKED = frozenset({"declared_width", "no_statistical_error", "phantom_missing", "mixed_versions"})


def queries_rows(audit: AuditInput) -> list[dict[str, str]]:
    """One row a question, in the order setups, periods, phantoms, scans; keys are `QUERIES_COLUMNS`.

    Each item is asked once about each code. A sentence for one site never names what is another site's.
    """
    rows = [
        *_setups(audit),
        *(row for period in periods_of(audit) for row in _period(audit, period)),
        *(row for phantom in audit.phantoms for row in _phantom(audit, phantom)),
        *(row for setup in audit.setups for row in _scans_together(audit, setup)),
        *(row for scan in audit.plan.get("scans", []) for row in _scan(audit, scan)),
        *_versions(audit),
        *_strays(audit),
        *_history(audit),
    ]
    once = list({(row["item"], row["code"]): row for row in reversed(rows)}.values())[::-1]
    own = OwnWords.of_all(words_by_site(audit))
    return [{**row, "sentence": own[row["site"]].text(row["sentence"])} if row["site"] else row for row in once]


def _row(site: str, item: str, code: str, sentence: str, who: str) -> dict[str, str]:
    text = " ".join(sentence.split()).replace("`", "")
    return {"site": site, "item": item, "code": code, "sentence": text, "who_acts": who}


def request(code: str) -> str:
    """What a code asks for, as a sentence.

    >>> request("image_zero")
    'Please export the image again.'
    """
    if code in _ASKED_OF_SITES:
        return f"Please {_ASKED_OF_SITES[code]}."
    known = HOLDS.get(code) or FLAGS.get(code)
    if known is None:
        return "Please look into it and tell us what you find."
    return "No action is needed." if known.mend.startswith(("nothing", "usual")) else f"Please {known.mend}."


def who_acts(code: str) -> str:
    """Who acts on a code; the data manager where the list does not know it."""
    known = HOLDS.get(code) or FLAGS.get(code)
    return known.who if known else "data manager"


def _sentence(text: str) -> str:
    text = text.strip()
    return text if not text or text.endswith((".", "!", "?")) else f"{text}."


def _setups(audit: AuditInput) -> list[dict[str, str]]:
    having = {str(entry["setup"]) for entry in audit.plan.get("periods", [])}
    return [
        _row(
            str(row.get("site") or ""),
            str(row["setup"]),
            "no_phantom_session",
            f"We have neither a usable phantom scan nor a declared width for setup {row['setup']}. "
            "Please send a phantom scan made with this scanner and reconstruction.",
            "site",
        )
        for row in audit.setups
        if str(row["setup"]) not in having
    ]


def _sides(period: Period) -> list[tuple[str, Direction]]:
    return [(WORDS["in_plane"], period.in_plane), (WORDS["axial"], period.axial)]


def _period(audit: AuditInput, period: Period) -> list[dict[str, str]]:
    rows = []
    # Whether a period that no usable scan needs is too coarse is nobody's question yet.
    if period.verdict != "pass" and (period.verdict != "coarser" or _in_use(audit, period)):
        sentence, who = verdict_sentence(period, tolerance_mm=audit.settings["tolerance"]["achieved_mm"])
        rows.append(_row(period.site, period.name, period.verdict, sentence, who))
    for code, text in period.flags.items():
        if code not in _NOTES | _ASKED:
            what = _sentence(text or meaning(code))
            sentence = f"About the phantom scans of setup {period.setup}, session {period.phantom_session}: {what}"
            rows.append(_row(period.site, period.name, code, f"{sentence} {request(code)}", who_acts(code)))
    return rows


def _in_use(audit: AuditInput, period: Period) -> bool:
    names = ((entry["setup"], entry["phantom_session"], entry.get("in_use", True)) for entry in audit.plan["periods"])
    return (period.setup, period.phantom_session, True) in names


def verdict_sentence(period: Period, *, tolerance_mm: float) -> tuple[str, str]:
    """Why a period does not pass and what would help, as a sentence to send, and who acts."""
    who = f"setup {period.setup}, phantom session {period.phantom_session},"
    if not period.phantoms:
        who = f"setup {period.setup}"
    sides = _sides(period)
    if period.verdict == "unmeasured":
        lacking = " and ".join(word for word, side in sides if side.facts.measured_mm is None) or "whole"
        return (
            f"The {lacking} resolution of {who} is not known, so its scans are held. "
            "Please send a phantom scan that shows it, or state the width in mm with its source."
        ), "site"
    if period.verdict == "coarser":
        coarse = _list(
            f"{word} {number(side.facts.measured_mm, decimals=2)} mm against a target of "
            f"{number(side.facts.target_mm, decimals=2)} mm"
            for word, side in sides
            if _above(side, tolerance_mm)
        )
        return (
            f"The images of {who} are coarser than the common target ({coarse or 'see the plan'}), and smoothing "
            "cannot undo that. Please decide on a wider target or leave the setup out."
        ), "physicist"
    if period.verdict == "fail":
        off = _list(
            f"{word} {number(side.facts.achieved_mm, decimals=2)} mm instead of "
            f"{number(side.facts.target_mm, decimals=2)} mm"
            for word, side in sides
            if side.facts.source != "declared" and _missed(side, tolerance_mm)
        )
        return (
            f"After smoothing, the phantom of {who} measures {off}; the study allows a difference of "
            f"{number(tolerance_mm)} mm. Please find out whether the phantom's kind and details are right and whether "
            "its image is sound."
        ), "physicist"
    if period.verdict == "declared":
        which = " and ".join(word for word, side in sides if side.facts.source == "declared")
        return (
            f"The {which} resolution of {who} is a declared width that nobody has measured. Please send a phantom "
            "scan made with this scanner and reconstruction."
        ), "site"
    lacking = _list(word for word, side in sides if side.facts.achieved_mm is None)
    if lacking:
        return (
            f"The phantom of {who} could not be measured again after smoothing ({lacking}), so nothing shows that its "
            "scans reach the target. Please look at the phantom's image, kind and details."
        ), "physicist"
    return (
        f"The phantom measurement of {who} is too uncertain to show that its scans reach the target within "
        f"{number(tolerance_mm)} mm. Please send a phantom scan with more counts or more objects in the field."
    ), "site"


def _above(side: Direction, tolerance_mm: float) -> bool:
    measured, target = side.facts.measured_mm, side.facts.target_mm
    return measured is not None and target is not None and measured - target > tolerance_mm


def _missed(side: Direction, tolerance_mm: float) -> bool:
    achieved, target = side.facts.achieved_mm, side.facts.target_mm
    return achieved is not None and target is not None and abs(achieved - target) > tolerance_mm


def _list(parts: Iterable[str]) -> str:
    return ", ".join(parts)


def _phantom(audit: AuditInput, phantom: Row) -> list[dict[str, str]]:
    label, setup = str(phantom["phantom"]), str(phantom["setup"])
    if excluded(phantom):
        return []
    intake = audit.intake_phantoms.get(label, {})
    rows, site = [], site_of(audit, setup)
    about = f"Phantom scan {label} of setup {setup}"
    for code in intake.get("holds") or ():
        if code == "image_missing":
            sentence = f"{about}: we do not have its image. Please send the image, or tell us why there is none."
            rows.append(_row(site, label, "phantom_missing", sentence, "site"))
        else:
            rows.append(_row(site, label, code, f"{about} cannot be used: {meaning(code)}. {request(code)}", "site"))
    flags = flag_texts(intake.get("flags"))
    if not any(label in (entry.get("phantoms") or ()) for entry in audit.plan.get("periods", [])):
        flags |= flag_texts(audit.resolution.get(label, {}).get("flags"))  # otherwise its period asks
    for code, text in flags.items():
        if code not in _NOTES:
            sentence = f"{about}: {_sentence(text or meaning(code))} {request(code)}"
            rows.append(_row(site, label, code, sentence, who_acts(code)))
    return rows


def _scan(audit: AuditInput, scan: Row) -> list[dict[str, str]]:
    name, setup = str(scan["entities"]), str(scan["setup"])
    site, about = site_of(audit, setup), f"Scan {name} (setup {setup})"
    rows = []
    for code in scan.get("reasons") or ():
        note = str((scan.get("notes") or {}).get(code) or "").strip().rstrip(".")
        why = f"{meaning(code)} ({note})" if note else meaning(code)
        sentence = f"{about} is held out of the pooled data set: {why}. {request(code)}"
        rows.append(_row(site, name, code, sentence, who_acts(code)))
    for code, text in scan_flags(audit, scan).items():
        if code not in _NOTES and code not in _GATHERED:
            sentence = f"{about}: {_sentence(text or meaning(code))} {request(code)}"
            rows.append(_row(site, name, code, sentence, who_acts(code)))
    return rows


def _scans_together(audit: AuditInput, setup: Row) -> list[dict[str, str]]:
    label, rows = str(setup["setup"]), []
    own = [scan for scan in audit.plan.get("scans", []) if scan["setup"] == label]
    flagged = [scan_flags(audit, scan) for scan in own]
    for code in _GATHERED:
        texts = [flags[code] for flags in flagged if code in flags]
        if texts:
            found = "; ".join(dict.fromkeys(text for text in texts if text)) or meaning(code)
            sentence = (
                f"About {len(texts)} of the {len(own)} scans of setup {label}: {_sentence(found)} {request(code)}"
            )
            rows.append(_row(str(setup.get("site") or ""), label, code, sentence, who_acts(code)))
    return rows


def excluded(row: Row) -> bool:
    """Whether a table's row says `use: no`.

    >>> excluded({"use": "no"}), excluded({"use": True}), excluded({})
    (True, False, False)
    """
    return str(row.get("use")).strip().lower() in ("no", "false")


def _strays(audit: AuditInput) -> list[dict[str, str]]:
    rows = []
    for name in stray_files(audit):
        sentence = f"The file {name} lies among the harmonised images, but no accepted scan stands for it. "
        rows.append(_row("", name, "stray_image", sentence + request("stray_image"), who_acts("stray_image")))
    return rows


def _history(audit: AuditInput) -> list[dict[str, str]]:
    if not audit.history_problems:
        return []
    sentence = " ".join(audit.history_problems)
    code = "history_altered"
    return [_row("", "history.tsv", code, f"{sentence} {request(code)}", who_acts(code))]


def _versions(audit: AuditInput) -> list[dict[str, str]]:
    odd = odd_versions(audit)
    if not odd:
        return []
    sentence = f"{len(odd)} harmonised scans were made by other program versions than the rest. "
    return [_row("", "harmonised data set", "mixed_versions", sentence + request("mixed_versions"), "data manager")]
