"""What is raised when the user's input cannot be used.

Every message is one line that names the file, the place in it, the value found, what was
expected and how to mend it; the command line prints it and leaves with exit code 2.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class InputError(ValueError):
    """The user's input cannot be used as it is; the message says what to change."""


def nearest(word: str, known: Iterable[str]) -> str:
    """Return ``"; did you mean 'x'?"`` for the known name closest to `word`, else ``""``."""
    matches = difflib.get_close_matches(word, list(known), n=1, cutoff=0.5)
    return f"; did you mean {matches[0]!r}?" if matches else ""
