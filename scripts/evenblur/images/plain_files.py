"""What is a plain file; with nothing but the standard library, for commands that start without packages."""

import errno
import stat
from pathlib import Path


def check_plain_file(path: Path) -> None:
    """Refuse what is no plain file (a link to one is): a device or a pipe has no end that reading could come to.

    Raises
    ------
    OSError
        If the path is neither a plain file nor a folder, or is not there.
    """
    mode = path.stat().st_mode
    if not (stat.S_ISREG(mode) or stat.S_ISDIR(mode)):
        raise OSError(errno.EINVAL, "it is no plain file", str(path))
