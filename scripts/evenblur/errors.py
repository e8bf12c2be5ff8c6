"""The one exception for input that cannot be used."""


class InputError(ValueError):
    """Input that a person has to mend: the message is the one line that the person reads.

    Parameters
    ----------
    where
        The file (or table and row) that is wrong, as the user names it.
    what
        What is wrong with it.
    mend
        What to do about it.
    code
        A hold reason of `evenblur.codes` when a scan or phantom is kept out for it.
    """

    def __init__(self, where: str, what: str, mend: str, code: str | None = None) -> None:
        super().__init__(f"{where}: {what}; {mend}")
        self.where = where
        self.what = what
        self.mend = mend
        self.code = code
