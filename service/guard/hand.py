"""The slices in a worker's hand: the only money a price may be taken out of."""

from __future__ import annotations

from dataclasses import dataclass, field

from service.guard.control import Control

COUNTER_MAX = 2**32 - 1


@dataclass(slots=True)
class SliceInHand:
    """
    One leased slice while this worker bids from it; amounts in nanos.

    Args:
        expires_at: Boot-time clock in seconds after which no price may leave.
        day: Proleptic ordinal of its local day.
    """

    id: bytes
    line_item: str
    amount: int
    day: int
    leased_at: float
    expires_at: float
    issued: int = 0
    bids: int = 0

    @property
    def free(self) -> int:
        """What may still be bid from it, in nanos."""
        return self.amount - self.issued

    def take(self, price: int) -> int:
        """Set `price` nanos aside for a new bid; returns the bid's place in the slice."""
        # Checked although the gate has clamped the price: here the promise is kept or broken.
        if not 0 < price <= self.free or self.bids >= COUNTER_MAX:
            raise ValueError("not in this slice")
        counter = self.bids
        self.issued += price
        self.bids += 1
        return counter


@dataclass(slots=True)
class Given:
    """What a slice that left the hand had issued, for the retiring transaction."""

    id: bytes
    line_item: str
    issued: int
    bids: int
    under_floor: int = 0


@dataclass(slots=True)
class Issued:
    """What a worker has issued for one line item since it began; amounts in nanos."""

    before: int = 0
    by_control: int = 0


@dataclass(slots=True)
class Hand:
    """At most one slice per line item; retired ones wait here until the database knows."""

    slices: dict[str, SliceInHand] = field(default_factory=dict)
    under_floor: dict[str, int] = field(default_factory=dict)
    given: list[Given] = field(default_factory=list)
    issued: dict[str, Issued] = field(default_factory=dict)

    def has_room(self, line_item: str, control: Control) -> bool:
        """Whether the control arm may bid out of what was leased to this worker."""
        held, issued = self.slices.get(line_item), self.issued.get(line_item, Issued())
        leased = issued.before + (held.amount if held is not None else 0)
        return control.has_room(leased, issued.by_control)

    def by_control(self, line_item: str, price: int) -> None:
        """Note that the control arm took `price` nanos out of the slice in hand."""
        self.issued.setdefault(line_item, Issued()).by_control += price

    def usable(self, line_item: str, now: float) -> SliceInHand | None:
        """The slice to bid from, or None when there is none or its time is over."""
        held = self.slices.get(line_item)
        # At the moment itself it is over: the database may close it from then on.
        if held is not None and now >= held.expires_at:
            self.retire(line_item)
            return None
        return held

    def receive(self, fresh: SliceInHand) -> None:
        """Put a new slice in the hand; the one it replaces is retired, never extended."""
        self.retire(fresh.line_item)
        self.slices[fresh.line_item] = fresh

    def retire(self, line_item: str) -> None:
        """Take the slice out of the hand for good and note what it issued."""
        # It leaves the hand before its sum is read: no price can leave it after this line.
        old = self.slices.pop(line_item, None)
        if old is not None:
            passed = self.under_floor.pop(line_item, 0)
            self.given.append(Given(old.id, line_item, old.issued, old.bids, passed))
            self.issued.setdefault(line_item, Issued()).before += old.issued

    def retire_expired(self, now: float) -> None:
        """Retire every slice whose time is over."""
        # A list first, since retiring takes slices out of what is being walked over.
        for line_item in [k for k, s in self.slices.items() if now >= s.expires_at]:
            self.retire(line_item)

    def retire_all(self) -> None:
        """Retire every slice, as on a stop, a freeze of all or a new incarnation."""
        for line_item in list(self.slices):
            self.retire(line_item)
