"""The one family of errors this package raises, each with its message code and exit code."""

from __future__ import annotations

from dataclasses import dataclass

CODES = {
    "E101": "no such file",
    "E102": "empty, or not an audio file",
    "E103": "an audio header, but nothing that can be decoded",
    "E107": "too short",
    "E109": "the file changed while it was read",
    "E112": "sample rate or number of channels outside the supported range",
    "E113": "not a regular file, or not readable",
    "E114": "no such channel",
    "N101": "the content is of another format than the name says",
    "W104": "truncated: the header announces more than there is",
    "W105": "the length in the header was never filled in",
    "W106": "the header announces less than there is",
    "W107": "the length in the header ran over at 4 GiB",
    "W108": "damaged stretch, skipped",
    "W201": "samples that are not finite numbers",
    "W202": "clipping",
    "W206": "silence: one constant value for 0.1 s or more",
    "W207": "dead channel",
    "W208": "too little audio for the synthetic whistlers asked for",
    "E208": "no audio that takes a synthetic whistler",
    "E115": "a folder without recordings",
    "E301": "the recording's date lies outside the tables of the Earth's field",
    "N301": "start time unknown: times are relative, the Earth's field of 2025.0 is used",
    "E401": "a result cannot be written",
    "E402": "the output folder holds results of something else",
    "E403": "the output folder is in use by another run",
    "E404": "a file to be written exists and holds something else",
    "N401": "stopped by the user or the system",
    "N402": "nothing left to do",
    "W501": "saved state that cannot be used, measured again",
    "N501": "settings or input changed, measured again",
    "N502": "saved results without the record of their settings; defaults are used",
    "E601": "an option or setting outside its range",
    "E602": "a fault in the station file",
    "E603": "not a time",
    "E604": "a trace that no fit can use",
    "E605": "wrong use of the command line",
    "E606": "a fault in a table of picks",
    "E607": "an edit that hits no point, or not one alone",
    "E608": "an edit, or a table of edits, that cannot be read",
    "E609": "a saved result that cannot be read, or holds no such stroke",
    "E610": "a fault in the description of a synthetic recording",
    "E611": "a fault in a scene file",
    "E612": "dropouts in a scene, which a FLAC file cannot hold",
    "E613": "two scenes of one name",
    "E614": "neither scene files nor a path, or both",
    "E615": "a list of hops that cannot be read",
    "E701": "an internal fault; the message names the record of it",
}
"""Every message code: a letter (E error, W warning, N note) and three digits.

The first digit gives the subject: 1 the file, 2 the signal in it, 3 time, 4 output and resources,
5 saved state, 6 usage, 7 the program itself.
"""


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
        path = printable(self.path).replace('"', '\\"')
        return f'{self.severity} {self.code} "{path}": {printable(self.reason)}; {self.consequence}'


def printable(text: str) -> str:
    r"""Return text that is safe on a terminal: one line, no control or bidirectional characters.

    Examples
    --------
    >>> print(printable("a\nb\x1b[0m"))
    a\nb\x1b[0m
    >>> print(printable("not UTF-8: \udcff"))
    not UTF-8: \xff
    """
    return "".join(map(_printable_character, text))


def _printable_character(character: str) -> str:
    if character == "\\":
        return "\\\\"
    if character.isprintable():
        return character
    if "\udc80" <= character <= "\udcff":  # a byte of a file name that is not UTF-8
        return f"\\x{ord(character) - 0xDC00:02x}"
    return character.encode("unicode_escape").decode("ascii")


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


class BusyError(WhistlerError, OSError):
    """An output folder that another run is using."""

    exit_code = 75


class Stopped(BaseException):
    """A signal asked the program to stop; not an :class:`Exception`, so nothing swallows it.

    Parameters
    ----------
    signal_number : int
        The signal.
    notice : Notice, optional
        What to tell the user.
    """

    def __init__(self, signal_number: int, notice: Notice | None = None) -> None:
        reason = f"stopped by signal {signal_number}"
        super().__init__(reason)
        self.signal_number = signal_number
        self.notice = notice or Notice("N401", "whistler", reason, "what was done is saved")
