"""The one family of errors this package raises, each with its message code and exit code.

Codes are a letter (E error, W warning, N note) and three digits: 1xx the recording file, 2xx the
signal in it, 3xx time, 4xx resources and output, 5xx saved state, 6xx usage. README lists them.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Notice:
    """One line for the user: what happened to which input, and what follows from it.

    Parameters
    ----------
    code : str
        Letter and three digits, for example ``W105``; the first letter gives the severity.
    path : str
        The input or output it is about, as the user gave it.
    reason : str
        What is the case, with its numbers.
    consequence : str
        What was done about it, or what to do next.

    Examples
    --------
    >>> print(Notice("E101", "z.wav", "empty file (0 bytes)", "skipped"))
    error E101 "z.wav": empty file (0 bytes); skipped
    """

    code: str
    path: str
    reason: str
    consequence: str

    @property
    def severity(self) -> str:
        """``error``, ``warning`` or ``note``, from the code's letter."""
        return {"E": "error", "W": "warning", "N": "note"}[self.code[0]]

    def __str__(self) -> str:
        """Return the one physical line shown on standard error."""
        text = f"{self.reason}; {self.consequence}"
        return f'{self.severity} {self.code} "{printable(self.path)}": {printable(text)}'


def printable(text: str) -> str:
    r"""Return text that is safe on a terminal: one line, no control or bidirectional characters.

    Examples
    --------
    >>> printable("a\nb\x1b[0m")
    'a\\nb\\x1b[0m'
    """
    return "".join(
        character
        if character.isprintable() and character not in '"\\'
        else character.encode("unicode_escape").decode("ascii")
        if character not in '"\\'
        else "\\" + character
        for character in text
    )


class WhistlerError(Exception):
    """Root of every error raised on purpose by :mod:`whistler`.

    Parameters
    ----------
    notice : Notice
        The line shown to the user.
    """

    exit_code = 70

    def __init__(self, notice: Notice) -> None:
        super().__init__(str(notice))
        self.notice = notice


class UsageError(WhistlerError, ValueError):
    """An option, key or combination that cannot be meant."""

    exit_code = 2


class RecordingError(WhistlerError, ValueError):
    """A recording, or a file that should be one, that cannot be used."""

    exit_code = 4


class OutputError(WhistlerError, OSError):
    """A result that cannot be written."""

    exit_code = 74
