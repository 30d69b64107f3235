"""Our bids as the standard writes them, and in which ways we do not bid."""

from __future__ import annotations

from service import money
from service.guard.scale import WHOLE
from service.openrtb.offers import Terms
from service.openrtb.responses import Made, response
from tests.openrtb.sources import asked, mapped, request
from tests.openrtb.standard import faults


def test_only_what_is_known_is_written() -> None:
    """The least answer: ids, a price and our notices, as far as the source wants them."""
    source = mapped({"adomain": [], "crid": None}, notices=["billed"])
    body = request()
    found = asked(body, source)
    terms = Terms(None, "second", 0, "USD", WHOLE)
    price = money.price("9.43")
    made = Made(found.imps[0], terms, source.line_items[0], price, "USD", "t", "a")
    answer = response(source, found, "b1", [made])
    assert faults(answer, body) == []
    (seat,) = answer.pop("seatbid")
    assert answer == {"id": "r1", "bidid": "b1", "cur": "USD"}
    (bid,) = seat["bid"]
    assert bid.pop("burl").startswith("https://bids.example/openrtb/billed/t?price=")
    assert (seat.keys(), bid) == (
        {"bid": None}.keys(),
        {"id": "a", "impid": "1", "price": 9.43, "mtype": 1},
    )
