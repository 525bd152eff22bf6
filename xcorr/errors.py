"""The package's own error tree and the notes that travel with results.

Every error says three things: what was wrong, what was got, what to do. All
classes survive a pickle round trip, so that a worker process can raise them.
"""

from __future__ import annotations

from dataclasses import dataclass


class XcorrError(Exception):
    """Base of all errors that are the input's or the user's, never a bug of the program.

    Parameters
    ----------
    what : str
        What was wrong.
    got : str
        What was found instead.
    do : str
        What the user can do next.
    """

    def __init__(self, what: str, got: str = "", do: str = "") -> None:
        super().__init__(what, got, do)
        self.what, self.got, self.do = what, got, do

    def __str__(self) -> str:
        parts = [self.what]
        if self.got:
            parts.append(f"got {self.got}")
        if self.do:
            parts.append(self.do)
        return "; ".join(" ".join(part.split()) for part in parts)


class InputError(XcorrError):
    """A data file, template or line list cannot be used."""


class SettingsError(XcorrError):
    """The run file or a command-line value is wrong."""


class CoverageError(InputError):
    """Too few channels, spaxels or positions remain for the question asked."""


class OutputError(XcorrError):
    """The output cannot be written."""


@dataclass(frozen=True)
class Note:
    """A doubt that does not stop the work: recorded in the result as well as logged.

    Attributes
    ----------
    code : str
        Stable short name in kebab case, e.g. ``"no-error-plane"``.
    message : str
        One plain sentence with the numbers.
    """

    code: str
    message: str
