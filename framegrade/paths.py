"""File names in messages, and what keeps a file from being read."""

from __future__ import annotations

import os
import stat
from pathlib import Path


def shown(path: str | os.PathLike[str]) -> str:
    """A file name that fits into one line of text: control characters and undecodable bytes are escaped.

    Parameters
    ----------
    path : str or path-like

    Returns
    -------
    str
    """
    text = os.fspath(path)
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


def unreadable_cause(path: str | os.PathLike[str], kind: str) -> str | None:
    """Why a path is no readable regular file; None when it is one.

    Parameters
    ----------
    path : str or path-like
    kind : str
        What the file should be, with its article, for the sentence: "a clip".

    Returns
    -------
    str or None
        A clause without the file name.
    """
    path = Path(path)
    try:
        mode = path.stat().st_mode
        if stat.S_ISDIR(mode):
            return f"is a folder, not {kind}"
        if not stat.S_ISREG(mode):  # opening a pipe would wait for ever
            return f"is not a regular file, so not {kind}"
        with path.open("rb"):
            pass
    except FileNotFoundError:
        return "there is no such file"
    except PermissionError:
        return "cannot be read: permission denied"
    except (OSError, ValueError) as error:
        return f"cannot be opened: {(getattr(error, 'strerror', None) or str(error)).lower()}"
    return None
