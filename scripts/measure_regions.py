"""Measure the means of a scan's regions before and after harmonisation.

Inputs: the scan, its harmonised image, the images that mark regions. Output: the record of the means (JSON).
"""

import json
from pathlib import Path

from evenblur.command import Arguments, run, write_record


def main(arguments: list[str]) -> None:
    """Read the arguments, measure the means, write the record."""
    parser = Arguments(description=__doc__)
    parser.add_argument("--image", required=True, type=Path, help="the scan as it came")
    parser.add_argument("--harmonised", required=True, type=Path, help="its harmonised image")
    parser.add_argument("--places", required=True, help="where the regions lie, as JSON")
    parser.add_argument("--expected", default="{}", help="identities of the scan and the regions' images, as JSON")
    parser.add_argument("--record", required=True, type=Path, help="record to write")
    options = parser.parse_args(arguments)
    try:
        places, expected = json.loads(options.places), json.loads(options.expected)
    except ValueError:
        parser.error("--places and --expected are JSON")

    from evenblur.site_effect.regions import region_means

    means = region_means(options.image, options.harmonised, places=places, expected=expected)
    write_record(options.record, {"regions": means})


if __name__ == "__main__":
    raise SystemExit(run(main))
