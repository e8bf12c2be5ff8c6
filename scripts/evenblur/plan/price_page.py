"""The prices as a table, as a page, and as the block of study.yaml that freezes a target."""

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from markupsafe import Markup

from evenblur.audit.pages import plain_environment
from evenblur.audit.tables import cell, number, table_text
from evenblur.plan.price_curves import price_figure
from evenblur.plan.prices import RIBBON_MM, SPHERES_MM, Price, Prices, target_words
from evenblur.study.reading import Study

TEMPLATE = "plan.html.j2"

COLUMNS = (
    "target_in_plane_mm",
    "target_axial_mm",
    "origin",
    "periods_lost",
    "scans_accepted",
    "scans_lost",
    *(f"sphere_{size:g}mm" for size in SPHERES_MM),
    f"ribbon_{RIBBON_MM:g}mm_in_plane",
    f"ribbon_{RIBBON_MM:g}mm_axial",
    "noise_factor_white",
    "noise_factor_correlated",
)

_SHOWN_NOISE = 6
"""Most targets whose noise factors the page shows; the table of prices holds them all."""


def price_rows(prices: Prices) -> list[dict[str, str]]:
    """One row a target, widest first; keys are `COLUMNS`. Several names or `period=factor` pairs are joined by `;`."""
    rows = []
    for price in prices.prices:
        white = ";".join(f"{name}={number(noise.white)}" for name, noise in price.noise.items())
        correlated = ";".join(
            f"{name}={number(noise.correlated)}" for name, noise in price.noise.items() if noise.correlated is not None
        )
        recovered = {f"sphere_{size:g}mm": number(value) for size, value in zip(SPHERES_MM, price.spheres, strict=True)}
        rows.append(
            {
                "target_in_plane_mm": number(price.in_plane_mm),
                "target_axial_mm": number(price.axial_mm),
                "origin": ";".join(price.origins),
                "periods_lost": ";".join(price.lost_periods),
                "scans_accepted": str(price.scans_accepted),
                "scans_lost": str(price.scans_lost),
                **recovered,
                f"ribbon_{RIBBON_MM:g}mm_in_plane": number(price.ribbon_in_plane),
                f"ribbon_{RIBBON_MM:g}mm_axial": number(price.ribbon_axial),
                "noise_factor_white": white,
                "noise_factor_correlated": correlated,
            }
        )
    return rows


def price_table(prices: Prices) -> str:
    """plan.tsv as text."""
    return table_text(COLUMNS, price_rows(prices))


def frozen_target(in_plane_mm: float, axial_mm: float) -> str:
    """The block of study.yaml that freezes a target; who approves it, when and why is left to be filled.

    >>> print(frozen_target(8.4, 8.4))
    target:
      choose: fixed
      in_plane_mm: 8.4
      axial_mm: 8.4
      approval:
        by:      # who approves it
        on:      # the day, year-month-day
        reason:  # why this width
    <BLANKLINE>
    """
    return (
        "target:\n"
        "  choose: fixed\n"
        f"  in_plane_mm: {in_plane_mm!r}\n"
        f"  axial_mm: {axial_mm!r}\n"
        "  approval:\n"
        "    by:      # who approves it\n"
        "    on:      # the day, year-month-day\n"
        "    reason:  # why this width\n"
    )


def decision_lines(study: Study, plan: Mapping[str, Any], prices: Prices) -> Iterator[str]:
    """What whoever decides on the target reads on the terminal: prices, drift, and the block that freezes it."""
    target = plan["target"]
    if target["in_plane_mm"] is None:
        yield "No target could be set: no period in use has a width that may set it."
        return
    words = target_words(target["in_plane_mm"], target["axial_mm"])
    yield f"Target: {words}, {_how(target)}."
    yield from prices.sentences
    for period in plan["periods"]:
        for flag in period["flags"]:
            if flag["code"] == "width_drifts":
                yield f"Drift: {flag['text']}."
    if study.settings.target.choose != "fixed":
        yield "To freeze this target, put this block in the place of `target` in config/study.yaml and fill its blanks:"
        yield ""
        yield frozen_target(target["in_plane_mm"], target["axial_mm"]).rstrip()
        yield ""


def _how(target: Mapping[str, Any]) -> str:
    if target["choose"] == "fixed":
        return f"fixed by {target['decided_by']}"
    return f"set by {target['decided_by']}"


def render_prices(study: Study, plan: Mapping[str, Any], prices: Prices, *, templates: Path) -> str:
    """plan.html: one self-contained page, everything from the records escaped.

    Parameters
    ----------
    study, plan, prices
        The study, its plan, and what `evenblur.plan.prices.price_targets` found.
    templates
        Folder with `plan.html.j2` and `style.css`.
    """
    environment = plain_environment(templates)
    environment.filters |= {"mm": number, "share": _share}
    style = Markup((templates / "style.css").read_text(encoding="utf-8"))
    return environment.get_template(TEMPLATE).render(style=style, **_page(study, plan, prices))


def _share(value: float | None) -> str:
    return "–" if value is None else f"{value:.2f}"


def _page(study: Study, plan: Mapping[str, Any], prices: Prices) -> dict[str, Any]:
    target = plan["target"]
    chosen = None if target["in_plane_mm"] is None else (target["in_plane_mm"], target["axial_mm"])
    own = next((p for p in prices.prices if (p.in_plane_mm, p.axial_mm) == chosen), None)
    isotropic = all(price.in_plane_mm == price.axial_mm for price in prices.prices)
    shown = _shown(prices, own)
    return {
        "title": study.settings.study.title,
        "demo": study.settings.demo,
        "modality": study.settings.modality.upper(),
        "own": own,
        "verdict": _verdict(own),
        "how": _how(target) if own else "",
        "prices": prices.prices,
        "isotropic": isotropic,
        "spheres": SPHERES_MM,
        "ribbon": RIBBON_MM,
        "sentences": prices.sentences,
        "figure": Markup(price_figure(prices.prices, chosen=chosen)),  # drawn by us; every text in it is escaped
        "shown": shown,
        "periods": [_period(entry, shown, study) for entry in plan["periods"] if entry["in_use"]],
        "drift": [_drift(entry) for entry in plan.get("drift", [])],
        "frozen": frozen_target(*chosen) if chosen else "",
        "is_fixed": target["choose"] == "fixed",
        "tolerance": study.settings.tolerance,
        "matched": study.settings.kernel == "matched",
        "left": len(prices.prices) - len(shown),
    }


def _verdict(own: Price | None) -> str:
    if own is None:
        return "No target could be set: no period in use has a width that may set it."
    lost = len(own.lost_periods)
    periods = "no period is" if lost == 0 else f"{lost} period{' is' if lost == 1 else 's are'}"
    return (
        f"The plan's target is {own.words}: it takes in {own.scans_accepted} scans and loses {own.scans_lost}; "
        f"{periods} coarser than it."
    )


def _shown(prices: Prices, own: Price | None) -> list[Price]:
    """The targets whose noise factors the page shows: the plan's own and those nearest to it, widest first."""
    if len(prices.prices) <= _SHOWN_NOISE:
        return list(prices.prices)
    middle = own.in_plane_mm if own else prices.prices[len(prices.prices) // 2].in_plane_mm
    nearest = sorted(prices.prices, key=lambda price: (abs(price.in_plane_mm - middle), price.in_plane_mm))
    kept = nearest[:_SHOWN_NOISE]
    return [price for price in prices.prices if price in kept]


def _period(entry: Mapping[str, Any], shown: list[Price], study: Study) -> dict[str, Any]:
    name = f"{entry['setup']}.{entry['phantom_session']}"
    measured = entry["measured"]
    allowance = study.settings.target.allowance_se
    limits = [
        measured[f"{d}_mm"] + allowance * measured[f"{d}_se_mm"]
        for d in ("in_plane", "axial")
        if measured[f"{d}_mm"] is not None
        and (study.settings.target.declared_counts or entry["source"][d] != "declared")
    ]
    return {
        "name": cell(f"{entry['setup']} · {entry['phantom_session']}"),
        "in_plane_mm": measured["in_plane_mm"],
        "axial_mm": measured["axial_mm"],
        "limit_mm": max(limits, default=None),
        "noise": [price.noise.get(name) for price in shown],
    }


def _drift(entry: Mapping[str, Any]) -> dict[str, Any]:
    return dict(entry)
