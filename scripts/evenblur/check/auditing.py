"""Check a bag, and with the study at hand the images too: one line a check, the first disagreement last."""

from collections.abc import Callable
from functools import partial
from pathlib import Path

from evenblur.check.bags import check_fixity
from evenblur.check.decisions import check_covariates, check_prices, check_site_effect
from evenblur.check.drift import check_drift
from evenblur.check.findings import DisagreementError, shown
from evenblur.check.handover import Handover, load_handover
from evenblur.check.originals import (
    check_identities,
    check_packed_images,
    check_packed_phantoms,
    check_results,
    drawn,
    smooth_again,
)
from evenblur.check.periods import Period, give_kernels, list_periods, own_target
from evenblur.check.tables import check_images, check_plan, check_scans, check_sites
from evenblur.check.views import check_audit_record, check_history, check_spreadsheets, told_alterations

Say = Callable[[str], None]


def check_handover(bag: Path, *, study: Path | None = None, sample: int = 5, seed: int = 0, say: Say = print) -> bool:
    """Check a bag; with `study`, the images that it speaks of as well.

    Parameters
    ----------
    bag
        The bag's folder.
    study
        The study folder with the originals and the harmonised images.
    sample, seed
        How many scans are smoothed again, and which draw.
    say
        Takes the table's lines.

    Returns
    -------
    bool
        Whether everything agreed. The last line names the first thing that did not.
    """
    say(f"{'check':50} {'compared':>16}   result")
    table = _Table(say)
    try:
        _check(table, bag, study, sample, seed)
    except DisagreementError as error:
        say(f"{shown(table.current):50} {'':>16}   DISAGREES")
        say(f"first disagreement: {error}")
        return False
    say("everything that was compared agrees")
    return True


class _Table:
    def __init__(self, say: Say) -> None:
        self.say = say
        self.current = ""

    def line(self, name: str, unit: str, count: Callable[[], int]) -> None:
        self.current = name
        try:
            found = count()
        except (LookupError, TypeError, ValueError, AttributeError, ArithmeticError) as error:
            # Records of another shape than the documentation's: whatever wrote them, they cannot be relied on.
            raise DisagreementError(
                name, f"a record has another form than it should ({type(error).__name__})"
            ) from None
        self.say(f"{name:50} {f'{found} {unit}':>16}   agrees")


def _check(table: _Table, bag: Path, study: Path | None, sample: int, seed: int) -> None:
    table.line("fixity of the bag (RFC 8493)", "files", lambda: check_fixity(bag))
    read: list[Handover] = []

    def load() -> int:
        read.append(load_handover(bag))
        return len(read[0].setups) + len(read[0].phantoms) + len(read[0].scans)

    table.line("a record for every row of the study", "rows", load)
    content = read[0]
    periods: dict[str, Period] = {}
    target: dict[str, float | None] = {}

    def check_plan_anew() -> int:
        periods.update(list_periods(content))
        target.update(own_target(content, periods))
        give_kernels(content, periods, target)
        return check_plan(content, periods, target)

    table.line("plan.json worked out anew", "numbers", check_plan_anew)
    table.line("drift of the setups' widths", "numbers", lambda: check_drift(content, periods))
    table.line("sites.tsv worked out anew", "cells", lambda: check_sites(content, periods, target))
    table.line("scans.tsv worked out anew", "cells", lambda: check_scans(content, periods))
    table.line("covariates.tsv worked out anew", "cells", lambda: check_covariates(content, periods, target))
    table.line("plan.tsv worked out anew", "cells", lambda: check_prices(content, periods, target))
    table.line("site effect from the regions' records", "numbers", lambda: check_site_effect(content))
    table.line("spreadsheets against the tables", "cells", lambda: check_spreadsheets(content))
    table.line("audit.json and the sites' own records", "cells", lambda: check_audit_record(content))
    table.line("history.tsv, line by line", "lines", lambda: check_history(content))
    told = told_alterations(content)
    if told:
        table.say(f"mind: {told} line(s) of history.tsv tell that the file had been altered before a run")
    table.line("images.tsv against the records", "images", lambda: check_images(content))
    table.line("voxels of the packed phantoms", "phantoms", lambda: check_packed_phantoms(content))
    table.line("packed harmonised images", "images", lambda: check_packed_images(content))
    if study is None:
        return
    table.line("the bag's copies against the study", "files", lambda: check_results(content, study))
    table.line("hashes of originals and harmonised images", "images", lambda: check_identities(content, study))
    for key in drawn(content, sample, seed):
        _smooth(table, key, partial(smooth_again, content, study, periods, key))


def _smooth(table: _Table, key: str, compare: Callable[[], tuple[float | None, str]]) -> None:
    table.current = f"smoothed again: {key}"
    difference, note = compare()
    shown = "not compared" if difference is None else f"{difference:.1e} of max"
    table.say(f"{table.current:50} {shown:>16}   {'agrees' if difference is not None else note}")
