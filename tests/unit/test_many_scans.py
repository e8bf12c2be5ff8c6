"""A study of a thousand scans: the report stays below its size, whatever its pictures."""

import json

import pytest

from evenblur.audit.articles import PICTURES_BYTES, articles, bounded
from evenblur.audit.facts import audit_record
from evenblur.audit.report import render_report
from many_scans_example import TEMPLATES, many_scans


@pytest.fixture(scope="module")
def many():
    audit, pictures = many_scans(scans=1000, setups=60)
    return audit, audit_record(audit), pictures


def test_the_report_of_a_thousand_scans_stays_below_eight_megabytes(many):
    audit, record, pictures = many
    page = render_report(record, audit=audit, templates=TEMPLATES, pictures=pictures)
    assert len(page.encode()) < 8_000_000
    assert page.count("data-status=") == 1000  # every scan has its row
    for period in record.periods:
        assert f'id="period-{period.key}"' in page
    assert page.count("This page has no room") > 0  # some pictures stand in the sites' records alone
    assert len(json.dumps(record.model_dump(mode="json"))) < 8_000_000


def test_pressing_periods_keep_their_pictures(many):
    audit, record, _ = many
    everything = articles(record.periods, audit)
    assert sum(article.size for article in everything) > PICTURES_BYTES
    shown = bounded(everything)
    assert sum(article.size for article in shown) <= PICTURES_BYTES
    assert [article.period.key for article in shown] == [period.key for period in record.periods]
    pressing = [article for article in shown if article.pressing]
    assert pressing
    assert not any(article.left_out for article in pressing)
    assert any(article.left_out for article in shown)
