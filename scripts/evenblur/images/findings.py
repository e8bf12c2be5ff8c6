"""What a look at an image finds: a code, a sentence, and whether it holds the image."""

from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Finding:
    """One finding about an image.

    Attributes
    ----------
    code
        A hold reason or a flag of `evenblur.codes`.
    text
        What was found, in words; a hold's sentence ends with the mend after a semicolon.
    holds
        Whether the image is kept out for it.
    value
        The number behind it, where there is one.
    """

    code: str
    text: str
    holds: bool = False
    value: float | None = None

    def flag(self) -> dict[str, Any]:
        """The finding as records hold flags."""
        return {"code": self.code, "text": self.text, "value": self.value}
