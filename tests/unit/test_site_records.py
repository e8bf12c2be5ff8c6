"""Each site's own record: complete by itself, and without a word about another site."""

import json
import re
from dataclasses import replace
from pathlib import Path

import pytest

from audit_example import PERIODS, example_audit
from evenblur.audit.facts import audit_record
from evenblur.audit.own_words import ELSEWHERE, OwnWords, words_by_site
from evenblur.audit.queries import queries_rows
from evenblur.audit.site_pages import render_sites
from evenblur.audit.site_records import remove_others, site_records

TEMPLATES = Path(__file__).resolve().parents[2] / "workflow" / "report"

# Labels that no other word holds, so that finding one means that it leaked.
NAMES = {"A": "anbury", "B": "brinford", "C": "cloamby", "D": "drewick", "E": "elmstow", "F": "flenby", "G": "gorwick"}


def named_audit():
    """The example with labels like a study's; a sentence of each site names another site's things."""
    text = json.dumps(_plain(example_audit()))
    for setup, name in NAMES.items():
        text = re.sub(rf'"site{setup}"', f'"{name}"', text)
        text = re.sub(rf'"(ph)?{setup}"', lambda found, name=name: f'"{found.group(1) or ""}{name}-1"', text)
        text = re.sub(rf"\b{setup}\.s1", f"{name}-1.s1", text)
        text = re.sub(rf"\b(sub-)?{setup.lower()}(0[1-4])\b", rf"\g<1>{name}\2", text)
        text = re.sub(rf"invented camera {setup}", f"camera of {name}", text)
    data = json.loads(text)
    audit = replace(
        example_audit(),
        **{key: tuple(data[key]) for key in ("setups", "phantoms", "scans", "harmonised_files")},
        plan=data["plan"],
        **{key: data[key] for key in ("resolution", "intake_phantoms", "intake_scans", "scan_records")},
        achieved={(f"{NAMES[setup]}-1", "s1"): data["achieved"][f"{NAMES[setup]}-1"] for setup in "ABCD"},
    )
    scans = []
    for number, scan in enumerate(audit.plan["scans"]):
        other = audit.plan["scans"][(number + 5) % len(audit.plan["scans"])]
        note = f"the same picture as {other['entities']} of {other['setup']} ({other['sha256']})"
        scans.append({**scan, "notes": dict.fromkeys(scan["reasons"], note)})
    flags = [{"code": "duplicate_phantom", "text": "phantoms phanbury-1 and phcloamby-1 are the same picture"}]
    periods = [{**entry, "flags": [*entry["flags"], *flags]} for entry in audit.plan["periods"]]
    target = {**audit.plan["target"], "choose": "fixed", "decided_by": "brinford-1.s1", "reason": "flenby is left out"}
    return replace(audit, plan={**audit.plan, "scans": scans, "periods": periods, "target": target})


def _plain(audit):
    achieved = {setup: record for (setup, _), record in audit.achieved.items()}
    return {**vars(audit), "achieved": achieved}


@pytest.fixture(scope="module")
def audit():
    return named_audit()


@pytest.fixture(scope="module")
def records(audit):
    return site_records(audit_record(audit), audit)


@pytest.fixture(scope="module")
def pages(audit, records):
    return render_sites(records, audit=audit, templates=TEMPLATES)


def hashes_of(audit, site):
    mine = {row["setup"] for row in audit.setups if row["site"] == site}
    found = {scan["sha256"] for scan in audit.plan["scans"] if scan["setup"] in mine and scan["sha256"]}
    return found | {audit.resolution[label]["input"]["sha256"] for label in audit.resolution if label[2:] in mine}


@pytest.mark.parametrize("site", NAMES.values())
def test_nothing_of_another_site_stands_in_a_sites_papers(audit, records, pages, site):
    told = [json.dumps(records[site].model_dump(mode="json"), ensure_ascii=False), pages[site]]
    for other in set(NAMES.values()) - {site}:
        foreign_hashes = hashes_of(audit, other) - hashes_of(audit, site)
        for text in told:
            assert other not in text.lower()  # site, setup, phantom and subject labels all hold the site's name here
            assert not [one for one in foreign_hashes if one in text or one[:12] in text]
    assert ELSEWHERE in told[0] or not records[site].scans  # the sentences that named others are still there


@pytest.mark.parametrize("site", NAMES.values())
def test_everything_of_the_site_stands_in_its_papers(audit, records, pages, site):
    whole, record = audit_record(audit), records[site]
    mine = {row["setup"] for row in audit.setups if row["site"] == site}
    assert [period.key for period in record.periods] == [p.key for p in whole.periods if p.setup in mine]
    assert [scan.entities for scan in record.scans] == [s.entities for s in whole.scans if s.setup in mine]
    assert [(q.item, q.code) for q in record.queries] == [(q.item, q.code) for q in whole.queries if q.site == site]
    numbers = [name for name in type(whole.periods[0]).model_fields if name.endswith("_mm")]
    for period, shown in zip([p for p in whole.periods if p.setup in mine], record.periods, strict=True):
        assert [getattr(shown, name) for name in numbers] == [getattr(period, name) for name in numbers]
    for scan in record.scans:
        assert scan.entities.split("_")[0] in pages[site]
        assert scan.input_sha256[:12] in pages[site]
    for query in record.queries:
        assert query.sentence[:40] in pages[site].replace("&#39;", "'")


def test_decisions_of_the_site_stand_in_its_record(records):
    assert [row.item for row in records["anbury"].exclusions] == ["old"]
    assert records["anbury"].exclusions[0].reason == "Bubble\tin the fill"
    assert all(not records[site].exclusions for site in NAMES.values() if site != "anbury")


def test_no_sentence_for_a_site_names_another(audit):
    for row in queries_rows(audit):
        for other in set(NAMES.values()) - {row["site"]}:
            assert not row["site"] or other not in row["sentence"].lower(), row


def test_no_sentence_for_a_site_speaks_of_our_tables(audit):
    for row in queries_rows(audit):
        if row["who_acts"] == "site":
            assert not re.search(r"\btables?\b|valid_until|study\.yaml|`", row["sentence"]), row


def test_shared_words_stay_and_others_go_whatever_their_case():
    words = {"quay": {"quay", "trav1", "sub-trav1"}, "mill": {"mill", "Mill-2", "trav1", "sub-trav1", "sub-07"}}
    own = OwnWords("quay", words)
    assert own.text("sub-trav1_ses-a of quay") == "sub-trav1_ses-a of quay"
    assert own.text("MILL-2, sub-07_ses-b, 07 mm, windmill, mill-3") == (
        f"{ELSEWHERE}, {ELSEWHERE}, 07 mm, windmill, mill-3"
    )
    assert own.value({"verdict": "mill", "why": "as mill"}) == {"verdict": "mill", "why": f"as {ELSEWHERE}"}


def test_a_bare_number_is_nobodys_word():
    audit = example_audit()
    scans = tuple({**scan, "subject": "12", "entities": "sub-12_ses-base"} for scan in audit.scans)
    words = words_by_site(replace(audit, scans=scans, plan={**audit.plan, "scans": []}))
    assert "12" not in words["siteA"]
    assert "sub-12" in words["siteA"]


def test_records_of_sites_that_are_gone_are_removed(tmp_path):
    for name in ("quay.html", "quay.json", "gone.html", "gone.json", "notes.txt"):
        (tmp_path / name).write_text("x")
    remove_others(tmp_path, {"quay"})
    assert sorted(path.name for path in tmp_path.iterdir()) == ["notes.txt", "quay.html", "quay.json"]


def test_the_same_records_give_the_same_pages(audit, records, pages):
    assert render_sites(records, audit=audit, templates=TEMPLATES) == pages
    assert set(pages) == set(NAMES.values())
    assert len(PERIODS) == len(pages)
