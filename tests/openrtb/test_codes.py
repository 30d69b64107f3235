"""The code lists beside the standard, and how a reason is kept in words."""

from __future__ import annotations

import pytest

from service.openrtb import codes
from tests.openrtb.standard import faults


@pytest.mark.parametrize(
    ("code", "words"),
    [
        (0, "0 bid won"),
        (102, "102 lost to higher bid"),
        (215, "215 app bundle exclusion"),
        (11, "11 unknown"),
        (216, "216 unknown"),
        (499, "499 unknown"),
        (500, "500 private to the exchange"),
        (123_456, "123456 private to the exchange"),
        (-1, "-1 unknown"),
    ],
)
def test_a_reason_is_kept_with_its_code(code: int, words: str) -> None:
    """So that whoever looks it up later finds the number and the meaning."""
    assert codes.loss_words(code) == words


def test_the_ranges_of_losses_are_those_of_the_standard() -> None:
    """0 to 10, 100 to 104 and 200 to 215, from IAB Tech Lab, "OpenRTB v3.0", Loss Reason Codes."""
    wanted = {*range(11), *range(100, 105), *range(200, 216)}
    assert set(codes.LOSS) == wanted
    assert sorted(codes.NO_BID) == list(range(18))


def test_what_a_sender_of_two_five_knows_is_the_beginning_of_the_list() -> None:
    """Codes only grew, so an old partner understands all up to ten."""
    assert codes.NO_BID_MAX_25 in codes.NO_BID
    assert {codes.INVALID_REQUEST, codes.TECHNICAL_ERROR} <= set(range(codes.NO_BID_MAX_25 + 1))
    assert codes.NO_TIME > codes.NO_BID_MAX_25


def test_no_word_stands_for_two_codes() -> None:
    """A person who reads a word can name its code."""
    assert len(set(codes.LOSS.values())) == len(codes.LOSS)
    assert len(set(codes.NO_BID.values())) == len(codes.NO_BID)


def test_what_is_private_collides_with_nothing_public() -> None:
    """An exchange's own numbers begin above every published one."""
    assert max(*codes.LOSS, *codes.NO_BID) < codes.PRIVATE
    assert set(codes.AUCTIONS.values()) == {"first", "second"}
    assert codes.FIXED_DEAL not in codes.AUCTIONS


def test_an_answer_that_is_none_is_found_out_by_the_other_reader() -> None:
    """The reading of the standard that answers are held against is no empty one."""
    bare = {"seatbid": [{"bid": [{"price": 0}]}]}
    assert faults(bare, None) == ["no id", "no id", "no impid", "no price"]
