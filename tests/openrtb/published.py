"""Examples and number tables that the standard publishes, as fixtures.

IAB Tech Lab, "OpenRTB Specification 2.6" (`2.6.md`, sections 4.4.1, 6.2, 6.3) and implementation
guide (`implementation.md`, sections 7.1, 7.6, 7.9, 7.16), repository openrtb2.x, tag 2.6-202606.
Creative Commons Attribution 3.0. Kept are the structure and the numbers that matter for a price,
and every oddity that a reader must take or refuse; names, addresses, ids and markup are invented,
and texts that only fill are shortened. Fields of which our notes say nothing are from memory.
"""

from __future__ import annotations

import json
from typing import Any

Body = dict[str, Any]

SITE: Body = {
    "id": "102855",
    "cat": ["IAB3-1"],
    "domain": "garden-news.example",
    "page": "https://garden-news.example/1234.html",
    "publisher": {"id": "8953", "name": "garden-news.example", "cat": ["IAB3-1"]},
}
DEVICE: Body = {"ua": "Invented/5.0", "ip": "192.0.2.10"}

# 6.2.1: the smallest real request.
BANNER: Body = {
    "id": "80ce30c53c16e6ede735f123ef6e32361bfc7b22",
    "at": 1,
    "cur": ["USD"],
    "imp": [{"id": "1", "bidfloor": 0.03, "banner": {"h": 250, "w": 300, "pos": 0}}],
    "site": SITE,
    "device": DEVICE,
    "user": {"id": "55816b39711f9b5acf3b90e313ed29e51665623f"},
}
# 6.2.2: `value` is no member of the Data object; a reader takes it all the same.
EXPANDABLE: Body = {
    "id": "123456789316e6ede735f123ef6e32361bfc7b22",
    "at": 2,
    "cur": ["USD"],
    "imp": [
        {
            "id": "1",
            "bidfloor": 0.03,
            "iframebuster": ["invented"],
            "banner": {
                "h": 250,
                "w": 300,
                "pos": 0,
                "battr": [13],
                "expdir": [2, 4],
            },
        }
    ],
    "site": SITE,
    "device": DEVICE,
    "user": {
        "id": "55816b39711f9b5acf3b90e313ed29e51665623f",
        "buyeruid": "545678765467876567898765678987654",
        "data": [
            {
                "id": "6",
                "name": "Invented data",
                "value": "unexpected",
                "segment": [{"id": "12341318394918", "name": "alpine"}],
            }
        ],
    },
}
# 6.2.3: a mobile app; no `cur`, so dollars.
APP: Body = {
    "id": "IxexyLDIIk",
    "at": 2,
    "bcat": ["IAB25", "IAB7-39", "IAB8-18", "IAB8-5", "IAB9-9"],
    "badv": ["blocked-one.example", "blocked-two.example"],
    "imp": [
        {
            "id": "1",
            "bidfloor": 0.5,
            "instl": 0,
            "tagid": "agltb3B1Yi1pbmNyDQsSBFNpdGUY7fD0FAw",
            "banner": {"w": 728, "h": 90, "pos": 1, "btype": [4], "battr": [14], "api": [3]},
        }
    ],
    "app": {
        "id": "agltb3B1Yi1pbmNyDAsSA0FwcBiJkfIUDA",
        "name": "Invented weather",
        "cat": ["IAB15", "IAB15-10"],
        "ver": "1.0.2",
        "bundle": "12345",
        "publisher": {"id": "agltb3B1Yi1pbmNyDAsSA0FwcBiJkfTUCV", "name": "Invented weather"},
    },
    "device": {
        "dnt": 0,
        "ua": "Invented/5.0",
        "ip": "192.0.2.11",
        "ifa": "00000000-0000-4000-8000-000000000001",
        "carrier": "Invented carrier",
        "language": "en",
        "make": "Invented",
        "model": "Pocket",
        "os": "Invented OS",
        "osv": "6.1",
        "js": 1,
        "connectiontype": 3,
        "devicetype": 1,
        "geo": {"lat": 35.012345, "lon": -115.12345, "country": "USA", "metro": "803"},
    },
    "user": {"id": "ffffffd5135596709273b3a1a07e466ea2bf4fff"},
}
# 6.2.4: `tmax` 120; `apis` where the table says `api`; `episode` as a number.
VIDEO: Body = {
    "id": "1234567893",
    "at": 2,
    "tmax": 120,
    "imp": [
        {
            "id": "1",
            "bidfloor": 0.03,
            "video": {
                "w": 640,
                "h": 480,
                "pos": 1,
                "startdelay": 0,
                "minduration": 5,
                "maxduration": 30,
                "apis": [1, 2],
                "protocols": [2, 3],
                "mimes": ["video/x-flv", "video/mp4"],
                "linearity": 1,
                "battr": [13, 14],
                "companionad": [
                    {"id": "1234567893-1", "w": 300, "h": 250, "pos": 1},
                    {"id": "1234567893-2", "w": 728, "h": 90, "pos": 1},
                ],
            },
        }
    ],
    "site": {
        "id": "1345135123",
        "domain": "garden-films.example",
        "cat": ["IAB2-1", "IAB2-2"],
        "content": {"id": "1234567893-5", "series": "Invented", "season": "1", "episode": 23},
    },
    "device": DEVICE | {"os": "Invented OS", "js": 1},
    "user": {
        "id": "456789876567897654678987656789",
        "buyeruid": "545678765467876567898765678987654",
    },
}
# 6.2.5: two deals with auctions, floors and seats of their own; no `bidfloorcur`.
DEALS: Body = {
    "id": "80ce30c53c16e6ede735f123ef6e32361bfc7b22",
    "at": 1,
    "cur": ["USD"],
    "imp": [
        {
            "id": "1",
            "bidfloor": 0.03,
            "banner": {"h": 250, "w": 300, "pos": 0},
            "pmp": {
                "private_auction": 1,
                "deals": [
                    {"id": "AB-Agency1-0001", "at": 1, "bidfloor": 2.5, "wseat": ["Agency1"]},
                    {"id": "XY-Agency2-0001", "at": 2, "bidfloor": 2.0, "wseat": ["Agency2"]},
                ],
            },
        }
    ],
    "site": SITE,
    "device": DEVICE,
}
# 7.9.6.1 and 7.9.6.3: out of home, in pounds. `geo.long` should be `lon`, `venuetaxonomy` is in
# no table, and the deals of the second one, which name no currency, are in dollars.
POUNDS: Body = {
    "id": "out-of-home-1",
    "at": 1,
    "cur": ["GBP"],
    "imp": [
        {
            "id": "1",
            "bidfloor": 5.0,
            "bidfloorcur": "GBP",
            "exp": 360,
            "qty": {"multiplier": 14.2, "sourcetype": 1, "vendor": "counts.example"},
            "banner": {"w": 1080, "h": 1920, "format": [{"w": 1080, "h": 1920}]},
        }
    ],
    "dooh": {
        "id": "1",
        "name": "Invented screens",
        "venuetype": ["30301"],
        "venuetax": 1,
        "venuetypeid": 30301,
        "publisher": {"id": "1", "name": "Invented screens"},
    },
    "device": {"geo": {"lat": 51.5, "long": -0.1, "country": "GBR"}, "ip": "192.0.2.12"},
}
POUNDS_DEALS: Body = {
    **POUNDS,
    "id": "out-of-home-3",
    "imp": [
        {
            **POUNDS["imp"][0],
            "banner": None,
            "video": {"mimes": ["video/mp4"], "w": 1080, "h": 1920, "maxduration": 15},
            "pmp": {"private_auction": 0, "deals": [{"id": "1234", "bidfloor": 5.0, "at": 1}]},
        }
    ],
}
REQUESTS: dict[str, Body] = {
    "6.2.1": BANNER,
    "6.2.2": EXPANDABLE,
    "6.2.3": APP,
    "6.2.4": VIDEO,
    "6.2.5": DEALS,
    "7.9.6.1": POUNDS,
    "7.9.6.3": POUNDS_DEALS,
}

# 6.3.1: its id and impid fit none of the requests above; the responses are samples of their own.
WON_NOTICE: Body = {
    "id": "1234567890",
    "bidid": "abc1123",
    "cur": "USD",
    "seatbid": [
        {
            "seat": "512",
            "bid": [
                {
                    "id": "1",
                    "impid": "102",
                    "price": 9.43,
                    "nurl": "https://adserver.example/winnotice?impid=102",
                    "iurl": "https://adserver.example/pathtosampleimage",
                    "adomain": ["advertiser.example"],
                    "cid": "campaign111",
                    "crid": "creative112",
                    "attr": [1, 2, 3, 4, 5, 6, 7, 12],
                }
            ],
        }
    ],
}
# 6.3.2: markup in the bid; no `cur`, so dollars.
MARKUP: Body = {
    "id": "123",
    "seatbid": [
        {
            "bid": [
                {
                    "id": "12345",
                    "impid": "2",
                    "price": 3.00,
                    "nurl": "https://example.example/winnoticeurl",
                    "adm": "<VAST version='2.0'>...</VAST>",
                }
            ]
        }
    ],
}
# 6.3.3: a deal; its addresses are printed with a blank inside.
DEAL: Body = {
    "id": "1234567890",
    "bidid": "abc1123",
    "cur": "USD",
    "seatbid": [
        {
            "seat": "512",
            "bid": [
                {
                    "id": "1",
                    "impid": "102",
                    "price": 5.00,
                    "dealid": "ABC-1234-6789",
                    "nurl": "http: //adserver.example/winnotice?impid=102",
                    "adomain": ["advertiser.example"],
                    "iurl": "http: //adserver.example/pathtosampleimage",
                    "cid": "campaign111",
                    "crid": "creative112",
                    "adid": "314",
                    "attr": [1, 2, 3, 4],
                }
            ],
        }
    ],
}
# 6.3.4: `adm` is text that holds JSON with dots where something was left out.
NATIVE: Body = {
    "id": "123",
    "seatbid": [
        {
            "bid": [
                {
                    "id": "12345",
                    "impid": "2",
                    "price": 3.00,
                    "nurl": "https://example.example/winnoticeurl",
                    "adm": '{"native":{"ver":"1.0","link":{...}, "imptrackers":[...],...}}',
                }
            ]
        }
    ],
}
# 7.9.6.2: a bill with macros and a blank in its address; a Bid has no `banner`.
POUNDS_BID: Body = {
    "id": "out-of-home-1",
    "cur": "GBP",
    "seatbid": [
        {
            "seat": "1",
            "bid": [
                {
                    "id": "1",
                    "impid": "1",
                    "price": 6.0,
                    "burl": "https://bids.example/billing?price=${AUCTION_PRICE} "
                    "&multiplier=${AUCTION_MULTIPLIER}",
                    "banner": {"w": 1080, "h": 1920},
                }
            ],
        }
    ],
}
RESPONSES: dict[str, Body] = {
    "6.3.1": WON_NOTICE,
    "6.3.2": MARKUP,
    "6.3.3": DEAL,
    "6.3.4": NATIVE,
    "7.9.6.2": POUNDS_BID,
}
BLANKS = {"6.3.3", "7.9.6.2"}  # Those whose addresses no client can call as they are printed.

# 7.1: the four ways not to bid; the first has no content at all.
NO_BIDS: list[Body] = [
    {},
    {"id": "1234567890", "seatbid": []},
    {"id": "1234567890", "seatbid": [], "nbr": 2},
]

# 7.6: three pods; each block begins with a word, and the requests are no JSON.
_POD_PRICES = {"structured": [0.27, 9.27], "dynamic": [10.27], "hybrid": [20.27, 0.27]}


def pod_request(kind: str) -> bytes:
    """A pod as it is printed: a word before it, remarks in it, a control character in a text."""
    return (
        f'BidRequest\n{{\n  "id": "{kind}",\n  "imp": [\n    // the first slot\n'
        '    {"id": "1", "video": {"mimes": ["video/mp4"], "podid": "pod\x01one"}}\n  ]\n}'
    ).encode()


def pod_response(kind: str) -> bytes:
    """The answer to a pod, with the word before it."""
    bids = [
        {"id": str(n), "impid": str(n), "price": price, "dur": 15, "slotinpod": 0}
        for n, price in enumerate(_POD_PRICES[kind], 1)
    ]
    body = {"id": kind, "seatbid": [{"bid": bids}]}
    return f"BidResponse\n{json.dumps(body)}".encode()


PODS = sorted(_POD_PRICES)
POD_PRICES = {0.27, 9.27, 10.27, 20.27}

# 7.9.6.4: quotes inside a text that are not escaped: no JSON.
BROKEN_RESPONSE = (
    b'{"id": "out-of-home-3", "seatbid": [{"bid": [{"id": "1", "impid": "1", "price": 6.0,'
    b' "adm": "<VAST version="4.1"></VAST>"}]}]}'
)

# 4.4.1: bids in CPM over a floor of 0.85, None an invalid one; then what each is told as price
# and as minimum to win, None where the text is empty. The third is below the floor, and is told
# a minimum all the same; the invalid one gets no notice of a price at all.
MIN_TO_WIN_FLOOR = "0.85"
MIN_TO_WIN_BIDS = ["1.00", "0.90", "0.80", None]
MIN_TO_WIN = {
    "first": (["1.00", None, None, None], ["0.90", "1.00", "1.00", None]),
    "second": (["0.91", None, None, None], ["0.90", "0.91", "0.91", None]),
}

# 7.9.4 and 7.16: exact sums.
DELIVERED = ("2.50", "30.3", "0.07575")
DISCOUNTED = {"bid": "10", "price": "8.0", "percent": "20.0", "cpm": "2.0"}
