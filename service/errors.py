"""Refusals and failures, apart from HTTP, so that every layer may raise them.

BidkeelError
├── Refusal                 the caller asked for something that cannot be done; nothing changed
│   ├── Malformed           not the form we read
│   ├── Unauthenticated     no key, or one we do not know
│   ├── Forbidden           the key lacks a scope
│   ├── NotFound            no such thing
│   ├── Conflict            it contradicts what is there
│   ├── Stale               the version named is not the current one
│   ├── NotOffered          this release does not do that
│   └── NeedsConfirmation   allowed only with an explicit word
├── StoreAway               the database did not answer; the same call may work later
├── PoisonLesson            one entry of a stream that the fold cannot take
├── Overloaded              too much at once; nothing was done, the same call may work later
├── BrokenPromise           a guard refused a write that the rules had allowed
└── Unsafe                  a setting or a schema under which we refuse to start
"""

from __future__ import annotations

from collections.abc import Mapping


class BidkeelError(Exception):
    """The root of every error of our own."""


class Refusal(BidkeelError):
    """
    An expected no, with a stable code and a sentence; it never echoes input.

    Args:
        code: Stable, lower case with underscores.
        detail: One sentence for people.
        data: Extra members of the answer, JSON ready.
    """

    def __init__(self, code: str, detail: str, data: Mapping[str, object] | None = None) -> None:
        super().__init__(detail)
        self.code = code
        self.detail = detail
        self.data = dict(data or {})


class Malformed(Refusal):
    """The body, a field or a parameter is not of the form we read."""


class Unauthenticated(Refusal):
    """No key came, or one that is unknown or ended."""


class Forbidden(Refusal):
    """The key is good but lacks the scope."""


class NotFound(Refusal):
    """There is no such thing."""


class Conflict(Refusal):
    """The wish contradicts what is there."""


class Stale(Refusal):
    """The version named by the caller is not the current one."""


class NotOffered(Refusal):
    """This release does not do that, and says so instead of ignoring the wish."""


class NeedsConfirmation(Refusal):
    """Allowed, but only when the caller says the word."""


class StoreAway(BidkeelError):
    """The database did not answer; perhaps the write happened, perhaps not."""


class PoisonLesson(BidkeelError):
    """
    A lesson that cannot be learnt, while those before it can.

    Args:
        place: Its place among the lessons that were handed in.
        error: What went wrong, for people.
    """

    def __init__(self, place: int, error: str) -> None:
        super().__init__(error)
        self.place = place


class Overloaded(BidkeelError):
    """More came than can be done in time; nothing of this call was done."""


class BrokenPromise(BidkeelError):
    """A guarded write touched no row although the rules had allowed it."""


class Unsafe(BidkeelError):
    """We refuse to start under this setting, schema or second process."""


def no_such_line_item() -> NotFound:
    """The one refusal for a line item that does not exist."""
    return NotFound("no_such_line_item", "There is no line item with this id.")
