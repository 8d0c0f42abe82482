"""The one way a mistake in the input reaches a person.

Every message is one line that says what is wrong, where, and what to do. The command line
prints it and leaves with exit code 2.
"""

from __future__ import annotations


class InputError(ValueError):
    """Something a person gave is wrong; the message is one line, ready to be shown."""

    def __init__(self, what: str, where: str = "", mend: str = "") -> None:
        parts = [f"{where}: {what}" if where else what, mend]
        super().__init__("; ".join(" ".join(part.split()) for part in parts if part))


class InputWarning(UserWarning):
    """Something a person gave is doubtful; the work goes on."""
