"""The forms of outcomes: one per kind, and a row that does not fit is a refusal of that row."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Literal, TypeAlias

from pydantic import Field

from service import money
from service.api.forms.fields import (
    TICKET,
    Instant,
    Name,
    Printable,
    Ref,
    SeenCpm,
    SeenValue,
    Ticket,
)
from service.api.forms.reading import OpenForm, at_most, bad_field, read, unknown_fields
from service.errors import Malformed
from service.feedback import Receipt, Report


class WonForm(OpenForm):
    """The bid won at this clearing price; left out, it is the bid, but in second price."""

    kind: Literal["won"]
    ticket: Ticket
    clearing_cpm: SeenCpm | None = None
    to_win_cpm: SeenCpm | None = None
    at: Instant | None = None

    def report(self) -> Report:
        """What it says, as a report."""
        prices = (self.clearing_cpm, self.to_win_cpm)
        return Report("won", self.ticket, None, *prices, at=self.at)


class LostForm(OpenForm):
    """The bid was beaten on price."""

    kind: Literal["lost"]
    ticket: Ticket
    to_win_cpm: SeenCpm | None = None
    at: Instant | None = None

    def report(self) -> Report:
        """What it says, as a report."""
        return Report("lost", self.ticket, to_win=self.to_win_cpm, at=self.at)


class VoidForm(OpenForm):
    """The bid neither won nor lost on price, so it teaches nothing."""

    kind: Literal["void"]
    ticket: Ticket
    why: Name | None = None
    at: Instant | None = None

    def report(self) -> Report:
        """What it says, as a report."""
        return Report("void", self.ticket, why=self.why, at=self.at)


class BilledForm(OpenForm):
    """The win was billed at this price."""

    kind: Literal["billed"]
    ticket: Ticket
    clearing_cpm: SeenCpm
    at: Instant | None = None

    def report(self) -> Report:
        """What it says, as a report."""
        return Report("billed", self.ticket, clearing=self.clearing_cpm, at=self.at)


class ValuedForm(OpenForm):
    """A win brought this value; by its ticket or by its ref."""

    kind: Literal["value"]
    ticket: Ticket | None = None
    ref: Ref | None = None
    value: SeenValue
    event_id: Printable
    corrects: Printable | None = None
    at: Instant | None = None

    def report(self) -> Report:
        """
        What it says, as a report.

        Raises:
            Malformed: It names no bid.
        """
        if self.ticket is None and self.ref is None:
            raise bad_field("", "A value needs the ref or the ticket of its bid.")
        return Report(
            *("value", self.ticket, self.ref),
            value=self.value,
            event_id=self.event_id,
            corrects=self.corrects,
            at=self.at,
        )


class OutcomesForm(OpenForm):
    """Outcomes, up to 1,000 unless set otherwise; each stands or falls alone."""

    outcomes: Annotated[list[object], Field(min_length=1)]


OutcomeForm: TypeAlias = WonForm | LostForm | VoidForm | BilledForm | ValuedForm
FORMS: dict[str, type[OutcomeForm]] = {
    "won": WonForm,
    "lost": LostForm,
    "void": VoidForm,
    "billed": BilledForm,
    "value": ValuedForm,
}
# What nearly all outcomes say, and no more.
_BARE = {"kind", "ticket"}
_PAID = {*_BARE, "clearing_cpm"}
_BEATEN = {*_BARE, "to_win_cpm"}
CODES = {
    "clearing_cpm": "bad_price",
    "to_win_cpm": "bad_price",
    "value": "bad_value",
    "ticket": "bad_ticket",
    "ref": "bad_ref",
}


def read_outcomes(
    members: Mapping[str, object], rows_max: int
) -> tuple[list[Report | Receipt], set[str]]:
    """
    Read outcomes, each row alone: a bad row becomes a receipt that refuses it.

    Raises:
        Malformed: There is no list of 1 to `rows_max` outcomes.
    """
    outcomes = read(OutcomesForm, members).outcomes
    at_most(rows_max, "outcomes", outcomes)
    unused = unknown_fields(OutcomesForm, members)
    rows: list[Report | Receipt] = []
    for row in outcomes:
        try:
            rows.append(_plain(row) or _report(row, unused))
        except Malformed as refusal:
            rows.append(refused_row(refusal))
    return rows, unused


def refused_row(refusal: Malformed) -> Receipt:
    """The receipt of a row that never became a report."""
    field = str(refusal.data.get("field", ""))
    detail = f"{field}: {refusal.detail}" if field else refusal.detail
    return Receipt(ref=None, status="refused", code=CODES.get(field, refusal.code), detail=detail)


def _plain(row: object) -> Report | None:
    """
    A win, bill or loss that says no more than its price, in half the time that its form takes.

    Returns:
        None for whatever else there is, and for what is unsound: the form says what is wrong.
    """
    if not isinstance(row, dict):
        return None
    names, kind, ticket = row.keys(), row.get("kind"), row.get("ticket")
    if not isinstance(ticket, str) or not TICKET.fullmatch(ticket):
        return None
    try:
        if names == _PAID and kind in ("won", "billed"):
            return Report(kind, ticket, None, _seen(row["clearing_cpm"]))
        if names == _BEATEN and kind == "lost":
            return Report(kind, ticket, None, None, _seen(row["to_win_cpm"]))
    except money.NotMoney:
        return None
    return Report(kind, ticket) if names == _BARE and kind in ("won", "lost") else None


def _seen(cpm: object) -> int:
    price = money.price(cpm, money.HALF_EVEN)
    if price < 0:
        raise money.NotMoney("below 0")
    return price


def _report(row: object, unused: set[str]) -> Report:
    if not isinstance(row, dict):
        raise bad_field("", "An outcome must be an object.")
    kind = row.get("kind")
    form = FORMS.get(kind) if isinstance(kind, str) else None
    if form is None:
        raise bad_field("kind", "It must be won, lost, void, billed or value.")
    unused |= unknown_fields(form, row)
    return read(form, row).report()
