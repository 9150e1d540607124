"""Refusals, as classes that know nothing of HTTP. One table in the API room maps each class to a status and a problem
type.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class FieldError:
    """One field that is wrong: a JSON pointer (or row and column of a file) and what to do."""

    pointer: str
    detail: str


class Refusal(Exception):  # noqa: N818 - a refusal is an answer, not a fault of the program
    """Something that was asked and is refused, with a sentence that says what to do."""

    def __init__(self, detail: str, errors: tuple[FieldError, ...] = ()) -> None:
        super().__init__(detail)
        self.detail = detail
        self.errors = errors


class Invalid(Refusal):
    """The content is wrong: field, row and remedy are named in ``errors``."""


class Malformed(Refusal):
    """The body cannot be read at all (not JSON, not gzip, not UTF-8)."""


class TooLarge(Refusal):
    """More than the door takes."""


class NotFound(Refusal):
    """No such vehicle, run, calibration or alert."""


class NothingInForce(Refusal):
    """The vehicle has no parameters in force."""

    def __init__(self, detail: str, withdrawn_numbers: tuple[int, ...]) -> None:
        super().__init__(detail)
        self.withdrawn_numbers = withdrawn_numbers


class NotObserved(Refusal):
    """The runs do not determine every quantity a baseline needs."""


class Conflict(Refusal):
    """The record has moved on, or holds something else under that name."""


class PreconditionRequired(Refusal):
    """A known thing would change: name the version you saw."""


class PreconditionFailed(Refusal):
    """The version named is not the current one."""


class NotSignedIn(Refusal):
    """No valid key or session."""


class NotAllowed(Refusal):
    """The key or person may not do this."""


class Unready(Refusal):
    """The database is missing or not at head."""
