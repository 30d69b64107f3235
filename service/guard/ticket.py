"""The signed string that goes out with a bid and comes back with its outcome.

It carries all that an outcome needs, so any worker can settle a win whose decision
was lost with a crashed worker. URL-safe text, at most 512 bytes.
"""

from __future__ import annotations

import binascii
import hmac
import struct
from functools import lru_cache
from hashlib import blake2b, sha256
from typing import NamedTuple

from service.guard.control import CONTROL, MAIN
from service.guard.fees import NONE, Fees
from service.guard.scale import PLAIN, Scale

TEXT_MAX = 512
FORM = 1
SCALED_FORM = 2  # With a scale at its end; all others stay as they always were.
MAC_BYTES = 16
KEY_ID_BYTES = 4
TEST, OF_CONTROL = 1, 8
AUCTIONS = {"second": 0, "first": 2, "fixed": 4}  # Beside the others among the flags.
_BY_FLAG = {flag: name for name, flag in AUCTIONS.items()}
HINT_BYTES = 8
_PADDING = b"=="
_TO_URL, _FROM_URL = bytes.maketrans(b"+/", b"-_"), bytes.maketrans(b"-_", b"+/")

# form, key id, incarnation, slice, counter, price, floor, snapshot, day, share, flat, flags
# Fixed widths and lengths before texts: a ticket is parsed without guessing, or not at all.
_HEAD = struct.Struct(">B4s8s16sIqqqIIqB")
_SCALE = struct.Struct(">3sqq")


class BadTicket(ValueError):
    """Not a ticket of ours: another form, an unknown key or a wrong signature."""


class Ticket(NamedTuple):
    """
    What travels with a bid.

    Args:
        slice: 16 random bytes of the slice the price was taken from.
        counter: The bid's place in its slice, from 0.
        price: The cost of the bid with its fees, and so its hold, in nanos per impression.
        floor: Least price the seller took, in nanos per impression.
        snapshot: The learner's seq the price was made from (the epoch).
        day: Proleptic ordinal of the local day the slice belongs to.
        auction: Kind of auction the bid was made for, which says what its outcome tells.
        fees: Those of when the price left, by which prices that come back are read.
        features: What is known of the impression, hashed; at most 255 bytes.
        hint: The caller's own prediction of its value, in nanos.
        arm: Of a control share: which rule bid.
        scale: By which prices that come back become costs.
    """

    line_item: str
    source: str
    slice: bytes
    counter: int
    price: int
    snapshot: int
    day: int
    incarnation: bytes
    test: bool = False
    floor: int = 0
    auction: str = "second"
    fees: Fees = NONE
    features: bytes = b""
    hint: int | None = None
    arm: str = MAIN
    scale: Scale = PLAIN

    @property
    def bid(self) -> bytes:
        """The bid id: slice + counter, so no two bids share one."""
        return ((int.from_bytes(self.slice) + self.counter) % 2**128).to_bytes(16)

    @property
    def ref(self) -> str:
        """The bid id as 22 characters, for values."""
        return ref_of(self.bid)


def ref_of(bid: bytes) -> str:
    """The 22 characters that name a bid."""
    return _text(bid)


def bid_of(ref: str) -> bytes:
    """
    The bid a ref names.

    Raises:
        BadTicket: Not 22 characters of ours.
    """
    bid = _bytes(ref) if len(ref) == 22 else b""
    if len(bid) != 16 or _text(bid) != ref:
        raise BadTicket("not a ref")
    return bid


class TicketKeys:
    """The first key signs, all verify; a key is known by the first bytes of its hash."""

    def __init__(self, secrets: list[bytes]) -> None:
        # Each with its key taken in already, which every ticket would do anew.
        self._macs = {
            _key_id(secret): blake2b(key=secret[:64], digest_size=MAC_BYTES) for secret in secrets
        }
        self._signing = _key_id(secrets[0])

    def sign(self, ticket: Ticket) -> str:
        """The text of a ticket."""
        plain = ticket.scale is PLAIN or ticket.scale == PLAIN
        head = _HEAD.pack(
            FORM if plain else SCALED_FORM,
            self._signing,
            ticket.incarnation,
            ticket.slice,
            ticket.counter,
            ticket.price,
            ticket.floor,
            ticket.snapshot,
            ticket.day,
            ticket.fees.share,
            ticket.fees.flat,
            AUCTIONS[ticket.auction]
            | (TEST if ticket.test else 0)
            | (OF_CONTROL if ticket.arm == CONTROL else 0),
        )
        body = head + _names(ticket.line_item, ticket.source) + _facts(ticket)
        if not plain:
            body += _packed(ticket.scale)
        return _text(body + _mac(self._macs[self._signing], body))

    def verify(self, text: str) -> Ticket:
        """
        Read a ticket of ours.

        Raises:
            BadTicket: Anything else.
        """
        raw = _bytes(text) if len(text) <= TEXT_MAX else b""
        known = len(raw) >= _HEAD.size + 4 + MAC_BYTES and raw[0] in (FORM, SCALED_FORM)
        if not known or _text(raw) != text:
            raise BadTicket("not a ticket")
        body, mac = raw[:-MAC_BYTES], raw[-MAC_BYTES:]
        keyed = self._macs.get(body[1 : 1 + KEY_ID_BYTES])
        # In constant time, so that a forger learns nothing from how long a refusal takes.
        if keyed is None or not hmac.compare_digest(mac, _mac(keyed, body)):
            raise BadTicket("not signed by us")
        return _unpacked(body)


def _unpacked(body: bytes) -> Ticket:
    form, _, incarnation, slice_id, counter, price, floor, snapshot, day, share, flat, flags = (
        _HEAD.unpack_from(body)
    )
    named = _end(body, _end(body, _HEAD.size))
    line_item, source = _names_of(body[_HEAD.size : named])
    featured = _end(body, named)
    hinted = _end(body, featured)
    auction = _BY_FLAG.get(flags & ~(TEST | OF_CONTROL))
    if auction is None:
        raise BadTicket("an unknown kind of auction")
    return Ticket(
        line_item,
        source,
        slice_id,
        counter,
        price,
        snapshot,
        day,
        incarnation,
        bool(flags & TEST),
        floor,
        auction,
        Fees(share, flat) if share or flat else NONE,
        body[named + 1 : featured],
        int.from_bytes(body[featured + 1 : hinted]) if body[featured] else None,
        CONTROL if flags & OF_CONTROL else MAIN,
        _scale(body[hinted + 1 :]) if form == SCALED_FORM else PLAIN,
    )


def _scale(packed: bytes) -> Scale:
    currency, rate, multiplier = _SCALE.unpack(packed)
    return Scale(currency.rstrip(b"\0").decode("ascii"), rate, multiplier)


def _packed(scale: Scale) -> bytes:
    return _piece(_SCALE.pack(scale.currency.encode("ascii"), scale.rate, scale.multiplier))


def _facts(ticket: Ticket) -> bytes:
    # Nothing of a kind is one zero byte, and most bids have nothing of any kind.
    if not ticket.features and ticket.hint is None:
        return b"\0\0"
    hint = b"" if ticket.hint is None else ticket.hint.to_bytes(HINT_BYTES)
    return _piece(ticket.features) + _piece(hint)


# The same few names come with every ticket.
@lru_cache(maxsize=4096)
def _names(line_item: str, source: str) -> bytes:
    return _piece(line_item.encode("ascii")) + _piece(source.encode("ascii"))


@lru_cache(maxsize=4096)
def _names_of(packed: bytes) -> tuple[str, str]:
    half = _end(packed, 0)
    return packed[1:half].decode("ascii"), packed[half + 1 :].decode("ascii")


def _piece(raw: bytes) -> bytes:
    return bytes([len(raw)]) + raw


def _end(body: bytes, begin: int) -> int:
    """Where the piece that begins here ends."""
    return begin + 1 + body[begin]


def _mac(keyed: blake2b, body: bytes) -> bytes:
    one = keyed.copy()
    one.update(body)
    return one.digest()


def _key_id(secret: bytes) -> bytes:
    return sha256(secret).digest()[:KEY_ID_BYTES]


def _text(raw: bytes) -> str:
    written = binascii.b2a_base64(raw, newline=False)
    return written.translate(_TO_URL).rstrip(b"=").decode("ascii")


def _bytes(text: str) -> bytes:
    # Signs beyond the alphabet are skipped here: whoever reads a text writes it again and compares.
    try:
        return binascii.a2b_base64(text.encode("ascii").translate(_FROM_URL) + _PADDING)
    except (binascii.Error, UnicodeEncodeError) as error:
        raise BadTicket("not of our alphabet") from error
