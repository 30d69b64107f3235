"""Tickets: they carry all an outcome needs, and nobody else can make or change one."""

from __future__ import annotations

import base64
import struct
from hashlib import blake2b, sha256

import pytest
from hypothesis import given
from hypothesis import strategies as some

from service.guard.control import CONTROL, MAIN
from service.guard.fees import Fees
from service.guard.scale import PLAIN, Scale
from service.guard.ticket import TEXT_MAX, BadTicket, Ticket, TicketKeys, bid_of, ref_of

KEYS = TicketKeys([b"first invented key", b"second invented key"])
TICKET = Ticket(
    line_item="alpine-season-pass",
    source="default",
    slice=bytes(range(16)),
    counter=7,
    price=1_234_567,
    snapshot=812,
    day=739_951,
    incarnation=b"incarnat",
)

printable = some.text(some.characters(min_codepoint=33, max_codepoint=126), min_size=1, max_size=64)
tickets = some.builds(
    Ticket,
    line_item=printable,
    source=printable,
    slice=some.binary(min_size=16, max_size=16),
    counter=some.integers(0, 2**32 - 1),
    price=some.integers(0, 2**62),
    snapshot=some.integers(0, 2**62),
    day=some.integers(0, 2**32 - 1),
    incarnation=some.binary(min_size=8, max_size=8),
    test=some.booleans(),
    auction=some.sampled_from(["first", "second", "fixed"]),
    fees=some.builds(Fees, some.integers(0, 10**9), some.integers(0, 2**40)),
    floor=some.integers(0, 2**62),
    features=some.binary(max_size=99),
    hint=some.none() | some.integers(0, 2**64 - 1),
    arm=some.sampled_from([MAIN, CONTROL]),
    scale=some.just(PLAIN)
    | some.builds(
        Scale,
        some.sampled_from(["", "EUR", "USD"]),
        some.integers(1, 2**62),
        some.integers(1, 2**62),
    ),
)

HOSTILE = [
    "", "=", "====", "A", " ", "\x00", "\n", "none", "AQ", "AQ==", "..", "%41%41", "\ud800",
    "ä" * 60,
    "\u202e" + "A" * 100, "A" * 100, "A" * 512, "A" * 513, "A" * 1_000_000, "ä" * 1_000_000,
    "AQAAAA" + "A" * 130, "💶" * 50, "'; DROP TABLE stream; --",
]  # fmt: skip


@given(tickets)
def test_a_ticket_comes_back_as_it_left(ticket: Ticket) -> None:
    """Every field survives, at any length of the ids, in URL-safe text of at most 512 bytes."""
    text = KEYS.sign(ticket)

    assert KEYS.verify(text) == ticket
    assert len(text) <= TEXT_MAX
    assert set(text) <= set("ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789-_")


@given(tickets)
def test_a_ticket_is_spelled_as_it_always_was(ticket: Ticket) -> None:
    """Byte by byte, for tickets of earlier releases are still out."""
    secret, plain = b"first invented key", ticket.scale == PLAIN
    flags = {"second": 0, "first": 2, "fixed": 4}[ticket.auction]
    flags += int(ticket.test) + (8 if ticket.arm == CONTROL else 0)
    key_id = sha256(secret).digest()[:4]
    place = ticket.incarnation, ticket.slice, ticket.counter
    body = struct.pack(">B4s8s16sI", 1 if plain else 2, key_id, *place)
    body += struct.pack(">qqqI", ticket.price, ticket.floor, ticket.snapshot, ticket.day)
    body += struct.pack(">IqB", ticket.fees.share, ticket.fees.flat, flags)
    hint = b"" if ticket.hint is None else ticket.hint.to_bytes(8)
    pieces = [ticket.line_item.encode(), ticket.source.encode(), ticket.features, hint]
    if not plain:
        scale = ticket.scale
        pieces.append(struct.pack(">3sqq", scale.currency.encode(), scale.rate, scale.multiplier))
    body += b"".join(bytes([len(piece)]) + piece for piece in pieces)
    signed = body + blake2b(body, key=secret, digest_size=16).digest()
    assert KEYS.sign(ticket) == base64.urlsafe_b64encode(signed).rstrip(b"=").decode()


def test_the_longest_ids_fit() -> None:
    """Two ids of 64 characters, 32 features and their constant, and a hint stay below the limit."""
    longest = TICKET._replace(line_item="x" * 64, source="y" * 64, features=b"f" * 99, hint=2**63)
    assert len(KEYS.sign(longest)) == 439


def test_every_changed_byte_is_refused() -> None:
    """No bit of a ticket can be turned without breaking its signature."""
    raw = base64.urlsafe_b64decode(KEYS.sign(TICKET) + "==")
    for place in range(len(raw)):
        for bit in range(8):
            changed = bytearray(raw)
            changed[place] ^= 1 << bit
            with pytest.raises(BadTicket):
                KEYS.verify(base64.urlsafe_b64encode(changed).rstrip(b"=").decode())


def test_every_changed_character_is_refused() -> None:
    """A ticket has one spelling: not even bits that carry nothing may differ."""
    for fill in range(3):  # All three ways in which base64 can end.
        text = KEYS.sign(TICKET._replace(source="d" * (7 + fill)))
        for place, old in enumerate(text):
            for new in "AQgwBf_-+/=":
                if new != old:
                    with pytest.raises(BadTicket):
                        KEYS.verify(text[:place] + new + text[place + 1 :])


def test_another_spelling_of_the_same_bytes_is_refused() -> None:
    """The plain alphabet of base64 and its padding are not ours."""
    text = next(t for n in range(100) if "-" in (t := KEYS.sign(TICKET._replace(counter=n))))
    for other in (text.replace("-", "+"), text + "=", text + "==", text + "\n", " " + text):
        with pytest.raises(BadTicket):
            KEYS.verify(other)


@pytest.mark.parametrize("cut", [1, 2, 16, 60])
def test_a_cut_or_extended_ticket_is_refused(cut: int) -> None:
    """What is missing or too much breaks the signature as well."""
    text = KEYS.sign(TICKET)
    for other in (text[:-cut], text[cut:], text + "A" * cut, text + text[:cut]):
        with pytest.raises(BadTicket):
            KEYS.verify(other)


def test_a_ticket_of_another_key_is_refused() -> None:
    """Whoever does not have the key cannot make a ticket."""
    with pytest.raises(BadTicket, match="not signed by us"):
        KEYS.verify(TicketKeys([b"somebody else's"]).sign(TICKET))


def test_a_key_id_alone_opens_nothing() -> None:
    """A ticket that names our key and is signed by another is refused."""
    ours = base64.urlsafe_b64decode(KEYS.sign(TICKET) + "==")
    theirs = base64.urlsafe_b64decode(TicketKeys([b"somebody else's"]).sign(TICKET) + "==")
    forged = theirs[:1] + ours[1:5] + theirs[5:]
    with pytest.raises(BadTicket, match="not signed by us"):
        KEYS.verify(base64.urlsafe_b64encode(forged).rstrip(b"=").decode())


def test_the_first_key_signs_and_all_verify() -> None:
    """Keys are changed by putting the new one first; the old one leaves when all came back."""
    before, after = TicketKeys([b"old"]), TicketKeys([b"new", b"old"])

    assert after.verify(before.sign(TICKET)) == TICKET
    assert TicketKeys([b"new"]).verify(after.sign(TICKET)) == TICKET
    with pytest.raises(BadTicket):
        TicketKeys([b"new"]).verify(before.sign(TICKET))


@pytest.mark.parametrize("text", HOSTILE, ids=lambda text: f"{len(text)} {text[:8]!a}")
def test_hostile_text_is_refused_in_peace(text: str) -> None:
    """Whatever comes as a ticket or a ref ends in the same refusal."""
    with pytest.raises(BadTicket):
        KEYS.verify(text)
    with pytest.raises(BadTicket):
        bid_of(text)


@given(some.text() | some.binary().map(lambda raw: base64.urlsafe_b64encode(raw).decode()))
def test_any_text_is_refused_in_peace(text: str) -> None:
    """No text fails otherwise than by BadTicket."""
    with pytest.raises(BadTicket):
        KEYS.verify(text)


@given(some.binary(min_size=16, max_size=16))
def test_a_ref_names_one_bid_in_22_characters(bid: bytes) -> None:
    """There and back, and no other spelling."""
    ref = ref_of(bid)

    assert len(ref) == 22
    assert bid_of(ref) == bid


def test_a_ref_has_one_spelling() -> None:
    """The last character carries two bits; the other four must be those we write."""
    spellings = [ref_of(bytes(16))[:-1] + last for last in "ABCDEFGHIJKLMNOPQRSTUVWXYZ"]
    read = []
    for ref in spellings:
        try:
            read.append(bid_of(ref))
        except BadTicket:
            continue
    assert read == [bytes(16), bytes(15) + b"\x01"]


def test_no_two_bids_of_a_slice_share_an_id() -> None:
    """The id is slice + counter, also where that passes the end of 128 bits."""
    last = TICKET._replace(slice=b"\xff" * 16)
    ids = {last._replace(counter=n).bid for n in range(1000)}

    assert len(ids) == 1000
    assert last._replace(counter=0).bid == b"\xff" * 16
    assert last._replace(counter=1).bid == bytes(16)
    assert all(len(bid) == 16 for bid in ids)


def test_every_field_is_signed() -> None:
    """A ticket for one line item, slice or price cannot be used for another."""
    others = [
        TICKET._replace(line_item="alpine-season-pasT"),
        TICKET._replace(source="defaulu"),
        TICKET._replace(line_item="alpine-season-passd", source="efault"),
        TICKET._replace(slice=bytes(16)),
        TICKET._replace(counter=8),
        TICKET._replace(price=1_234_568),
        TICKET._replace(snapshot=813),
        TICKET._replace(day=739_952),
        TICKET._replace(incarnation=b"incarnas"),
        TICKET._replace(test=True),
    ]
    signatures = {KEYS.sign(ticket)[-21:] for ticket in [TICKET, *others]}

    assert len(signatures) == len(others) + 1


# Signed by the release before scales, under the first invented key; no field was left out.
OF_THE_FIRST_RELEASE = (
    "AXZJi-xpbmNhcm5hdAABAgMEBQYHCAkKCwwNDg8AAAAHAAAAAAAS1ocAAAAAAAAAAAAAAAAAAAMsAAtK"
    "bwAAAAAAAAAAAAAAAAASYWxwaW5lLXNlYXNvbi1wYXNzB2RlZmF1bHQAAIReokOzKR3pgWDa9wRGSPI"
)


def test_a_ticket_of_the_first_release_still_verifies() -> None:
    """Bids that were open during an upgrade settle, and a plain ticket has not changed a byte."""
    assert KEYS.verify(OF_THE_FIRST_RELEASE) == TICKET
    assert KEYS.sign(TICKET) == OF_THE_FIRST_RELEASE
