"""The code lists of the standard, apart because both directions read them.

IAB Tech Lab, "OpenRTB v3.0", lists "No-Bid Reason Codes" and "Loss Reason Codes", to which 2.6
refers; Creative Commons Attribution 3.0. Codes from 500 on are private to an exchange.
"""

from __future__ import annotations

PRIVATE = 500

INVALID_REQUEST, TECHNICAL_ERROR, NO_TIME = 2, 1, 15

NO_BID: dict[int, str] = {
    0: "unknown error",
    1: "technical error",
    2: "invalid request",
    3: "known web crawler",
    4: "suspected non-human traffic",
    5: "cloud, data centre or proxy address",
    6: "unsupported device",
    7: "blocked publisher or site",
    8: "unmatched user",
    9: "daily user cap met",
    10: "daily domain cap met",
    11: "ads.txt authorisation unavailable",
    12: "ads.txt authorisation violation",
    13: "ads.cert authentication unavailable",
    14: "ads.cert authentication violation",
    15: "insufficient auction time",
    16: "incomplete supply chain",
    17: "blocked supply chain node",
}
NO_BID_MAX_25 = 10  # What came later a sender of 2.5 may not know.

LOSS: dict[int, str] = {
    0: "bid won",
    1: "internal error",
    2: "impression opportunity expired",
    3: "invalid bid response",
    4: "invalid deal",
    5: "invalid auction",
    6: "invalid advertiser domain",
    7: "missing markup",
    8: "missing creative",
    9: "missing price",
    10: "missing data for approval",
    100: "below auction floor",
    101: "below deal floor",
    102: "lost to higher bid",
    103: "lost to a bid for a deal",
    104: "seat blocked",
    200: "creative filtered, reason unknown",
    201: "creative pending",
    202: "creative disapproved",
    203: "size not allowed",
    204: "incorrect format",
    205: "advertiser exclusion",
    206: "app store exclusion",
    207: "not secure",
    208: "language exclusion",
    209: "category exclusion",
    210: "creative attribute exclusion",
    211: "ad type exclusion",
    212: "animation too long",
    213: "not allowed in deal",
    214: "invalid SKAdNetwork",
    215: "app bundle exclusion",
}
WON = 0
# Beaten on price. Of 206 to 213 an old partner may be off by one; none of these say so either way.
PRICED = frozenset({100, 101, 102, 103})

AUCTIONS = {1: "first", 2: "second"}
FIXED_DEAL = 3
AUCTION_DEFAULT = 2

MARKUP = {"banner": 1, "video": 2, "audio": 3, "native": 4}
TIMED = ("video", "audio")
CURRENCY_DEFAULT = "USD"
TAXONOMY_DEFAULT = 1


def loss_words(code: int) -> str:
    """What a loss was for, as it is kept with a void."""
    return f"{code} {LOSS.get(code, 'private to the exchange' if code >= PRIVATE else 'unknown')}"
