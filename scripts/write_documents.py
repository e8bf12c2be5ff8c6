"""Write the schemas and the tables of config/README.md anew from the models. For developers.

Inputs: the models of the library. Outputs: workflow/schemas/*.json, the marked blocks of config/README.md.
"""

from pathlib import Path

from evenblur.command import run, write_text

PROGRAM = Path(__file__).resolve().parents[1]


def main(_arguments: list[str]) -> None:
    """Write every document whose content follows from the models."""
    from evenblur.study.documents import fill_in, schema_files

    for name, text in schema_files().items():
        write_text(PROGRAM / "workflow" / "schemas" / name, text)
    page = PROGRAM / "config" / "README.md"
    write_text(page, fill_in(page.read_text(encoding="utf-8")))


if __name__ == "__main__":
    raise SystemExit(run(main))
