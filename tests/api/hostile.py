"""What a hostile or broken caller may put where a field belongs, as JSON text, kind by kind."""

from __future__ import annotations

import json
from typing import Any

CANARY = "canary-5e1f"
_HOLE = "@@hole@@"

BODIES: list[bytes] = [
    b"",
    b" ",
    b"null",
    b"[]",
    b"7",
    f'"{CANARY}"'.encode(),
    f'{{"{CANARY}": '.encode(),
    f"{{'{CANARY}': 1}}".encode(),
    f'{{"{CANARY}": 1, "{CANARY}": 2}}'.encode(),
    b'{"id": NaN}',
    b'{"reason": Infinity}',
    b'{"reason": -Infinity}',
    b'{"reason": ' + b"9" * 5000 + b"}",
    b'{"reason": 1e99999999999999999999}',
    b"[" * 100_000,
    b'{"reason":' * 100_000,
    b'{"reason": "' + CANARY.encode() + b'\x00"}',
    b'{"reason": "' + CANARY.encode() + b'\xff\xfe"}',
    f'{{"reason": "{CANARY}"}}'.encode("utf-16"),
    b"\xef\xbb\xbf{}",
    b'{"' + CANARY.encode() + b'": 1}',
    b'{"\\ud800' + CANARY.encode() + b'": 1}',
    b"x" * (4 * 1024 * 1024 + 1),
]

_TEXTS = [
    rf'"{CANARY}\u0000"',
    rf'"{CANARY}\ud800"',
    rf'"{CANARY}\u202e\u2066"',
    rf'"{CANARY}\n"',
    f'"{CANARY * 100_000}"',
    '""',
]
UP = ".." + "/"
_INJECTIONS = [
    f'"{CANARY}\'; DROP TABLE line_item; --"',
    f'"<script>{CANARY}</script>"',
    f'"{UP}{UP}{CANARY}"',
    f'"{{{{{CANARY}}}}}"',
    f'"%00{CANARY}"',
    f'"=cmd|{CANARY}"',
]
_NO_TEXT = ["true", "7", "1.5", "[]", "{}", f'["{CANARY}"]', f'{{"{CANARY}": 1}}']
_NO_NUMBER = ["NaN", "Infinity", "-Infinity", "9" * 5000, "1e999", "-1e999", "1e-999"]
_NO_OBJECT = ["true", "7", "1.5", "[]", f'"{CANARY}"', f'["{CANARY}"]']

HOSTILE: dict[str, list[str]] = {
    "id": [*_TEXTS, *_INJECTIONS, *_NO_TEXT, '"ü"', f'"{"x" * 65}"'],
    "ascii": [*_TEXTS, *_NO_TEXT, '"ü"', f'"{"x" * 65}"'],
    "words": [*_TEXTS, *_NO_TEXT, '" "'],
    "choice": [*_TEXTS, *_INJECTIONS, *_NO_TEXT, f'"{CANARY}"'],
    "time": [
        *(*_TEXTS, *_INJECTIONS, *_NO_TEXT),
        *(
            '"2026-13-01T00:00:00Z"',
            '"2026-12-01T00:00:00"',
            '"2026-12-01"',
            '"9999-12-31T00:00:00Z"',
        ),
    ],
    "money": [
        *(*_TEXTS, *_INJECTIONS, *_NO_NUMBER, "true", "[]", "{}", f'"{CANARY}"'),
        *('"nan"', '"Infinity"', '"1e3"', '"1,5"', '" 1"', '"1 "', '"+1"', '"${AUCTION_PRICE}"'),
        *(str(2**63), str(10**30), f'"{10**30}"', '"0.1234567890123456789012345678901"'),
    ],
    "whole": [
        *(*_TEXTS, *_NO_NUMBER, "true", "1.0", "1.5", '"1"', "[]", "{}", "-1"),
        *(str(2**63), str(10**30)),
    ],
    "truth": ["0", "1", '"true"', f'"{CANARY}"', "[]", "{}", "null", "NaN"],
    "object": _NO_OBJECT,
    "features": [
        *_NO_OBJECT,
        f'{{"{CANARY}": {{}}}}',
        f'{{"{CANARY}": NaN}}',
        f'{{"{CANARY}": 1e999}}',
        rf'{{"{CANARY}": "\ud800"}}',
        rf'{{"{CANARY}\u0000": 1}}',
        f'{{"{CANARY}": 1, "{CANARY}": 2}}',
        f'{{"x": "{CANARY * 10}"}}',
        json.dumps({f"{CANARY}-{number}": 1 for number in range(33)}),
    ],
}


def without(tokens: list[str], *allowed: str) -> list[str]:
    """The tokens that a field refuses although another of its kind might take them."""
    return [token for token in tokens if token not in allowed]


def spoiled(template: dict[str, Any], path: str, token: str) -> bytes:
    """The template as JSON with raw text in the place of one field, named by a dotted path."""
    copy = json.loads(json.dumps(template))
    *outer, last = path.split(".")
    place = copy
    for name in outer:
        place = place[int(name)] if name.isdecimal() else place[name]
    place[last] = _HOLE
    return json.dumps(copy).replace(json.dumps(_HOLE), token).encode()
