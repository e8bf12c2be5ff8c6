"""What every page shares: templates, style, script, and the promise that nothing is loaded from elsewhere."""

import base64
import hashlib
from pathlib import Path

import jinja2
from markupsafe import Markup

from evenblur.audit.self_checks import shown_difference, shown_error
from evenblur.audit.sentences import MEANINGS, SYMBOLS, shown_mm


def plain_environment(templates: Path) -> jinja2.Environment:
    """Jinja2 for any page: everything is escaped, and a name that is not given is an error.

    Parameters
    ----------
    templates
        Folder with the templates.
    """
    return jinja2.Environment(
        loader=jinja2.FileSystemLoader(templates),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )


def environment(templates: Path) -> jinja2.Environment:
    """Jinja2 for the pages: everything is escaped, and a name that is not given is an error.

    Parameters
    ----------
    templates
        Folder with the templates, `style.css` and `tables.js`.
    """
    pages = plain_environment(templates)
    pages.filters |= {"mm": shown_mm, "signed": shown_difference, "error": shown_error, "sentence": sentence}
    script = (templates / "tables.js").read_text(encoding="utf-8")
    pages.globals |= {
        "style": Markup((templates / "style.css").read_text(encoding="utf-8")),  # our own text, not a study's
        "script": Markup(script),
        "policy": policy(script),
        "symbols": SYMBOLS,
        "meanings": MEANINGS,
    }
    return pages


def policy(script: str) -> str:
    """The page's content security policy: this one script, inline styles and pictures that stand inside, nothing else.

    >>> policy("")[:40]
    "default-src 'none'; img-src data:; style"
    """
    digest = base64.b64encode(hashlib.sha256(script.encode("utf-8")).digest()).decode("ascii")
    return (
        "default-src 'none'; img-src data:; style-src 'unsafe-inline'; "
        f"script-src 'sha256-{digest}'; base-uri 'none'; form-action 'none'"
    )


def sentence(text: str) -> str:
    """A text as a sentence: a capital in front where a plain word stands, a full stop at its end.

    >>> sentence("no end is seen"), sentence("Done.")
    ('No end is seen.', 'Done.')
    """
    text = text.strip().replace("`", "")
    if not text:
        return ""
    return text[0].upper() + text[1:] + ("" if text.endswith((".", "!", "?")) else ".")
