"""How one exchange's requests become opportunities: configuration, checked whole at the start."""

from __future__ import annotations

import json
import re
import tomllib
from collections.abc import Mapping
from pathlib import Path as File
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, ValidationError

from service.errors import Unsafe
from service.openrtb.paths import Path, path, word

FEATURES_MAX = 32
NOTICES = ("win", "billed", "loss")
# Markup of two hundred creatives fits; a log file named by mistake does not.
BYTES_MAX = 4 * 2**20
_ID = r"^[A-Za-z0-9._-]{1,64}$"
_ADDRESS = re.compile(r"https?://[A-Za-z0-9.-]{1,253}(:[0-9]{1,5})?(/[A-Za-z0-9._~/-]{0,100})?")


def _allowed(name: object) -> Path:
    found = path(name) if isinstance(name, str) else None
    if found is None:
        raise ValueError("a request's field that may not be read; see the list in deploy/README.md")
    return found


def _address(text: str) -> str:
    # Addresses are put together by adding to it, and two slashes are another path.
    if not _ADDRESS.fullmatch(text) or text.endswith("/"):
        raise ValueError("not an http or https address without a slash at its end")
    return text


def _words(wanted: object) -> frozenset[str]:
    several = wanted if isinstance(wanted, list) else [wanted]
    found = [word(one) for one in several]
    if not found or any(one is None for one in found):
        raise ValueError("not a text, a whole number, a truth value or a list of them")
    return frozenset(one for one in found if one is not None)


Words = Annotated[Any, AfterValidator(_words)]
Allowed = Annotated[Any, AfterValidator(_allowed)]
FeatureName = Annotated[str, Field(pattern=r"^[A-Za-z0-9._-]{1,64}$")]
CurrencyCode = Annotated[str, Field(pattern=r"^[A-Z]{3}$")]
Size = Annotated[str, Field(pattern=r"^[1-9][0-9]{0,4}x[1-9][0-9]{0,4}$")]
AuctionCode = Annotated[str, Field(pattern=r"^([5-9][0-9]{2}|[1-9][0-9]{3,5})$")]
Text = Annotated[str, Field(min_length=1, max_length=256)]


class _Strict(BaseModel):
    model_config = ConfigDict(strict=True, extra="forbid", frozen=True)


class Line(_Strict):
    """
    What one line item buys on this exchange, and with which creative.

    Several lines may name one line item; each line is one creative.
    """

    line_item: Annotated[str, Field(pattern=_ID)]
    type: Literal["banner", "video", "audio", "native"]
    when: dict[Allowed, Words] = {}
    unless: dict[Allowed, Words] = {}
    deals: list[Text] | Literal["any"] = []
    open: bool = True
    sizes: list[Size] = []
    duration_s: Annotated[int, Field(ge=1, le=3600)] | None = None
    adomain: list[Text] = []
    cat: list[Text] = []
    cattax: int = 1
    attr: list[int] = []
    bundle: Text | None = None
    language: Text | None = None
    secure: bool = True
    crid: Text | None = None
    cid: Text | None = None
    adid: Text | None = None
    iurl: Text | None = None
    adm: Annotated[str, Field(min_length=1, max_length=200_000)] | None = None
    exp_s: Annotated[int, Field(ge=1, le=604_800)] | None = None


class Source(_Strict):
    """One exchange: whom it calls, what its requests mean, which line items buy there."""

    notice_url: Annotated[str, AfterValidator(_address)]
    line_items: Annotated[list[Line], Field(min_length=1, max_length=200)]
    features: Annotated[dict[FeatureName, Allowed], Field(max_length=FEATURES_MAX)] = {}
    notices: list[Literal["win", "billed", "loss"]] = ["win", "billed", "loss"]
    seat: Text | None = None
    margin_ms: Annotated[int, Field(ge=0, le=10_000)] = 20
    currencies: Annotated[list[CurrencyCode], Field(min_length=1)] = ["USD"]
    private_auctions: dict[AuctionCode, Literal["first", "second"]] = {}
    no_bid: Literal["empty", "reason"] = "empty"
    other_reason: Annotated[int, Field(ge=500, le=9999)] | None = None
    price_form: Literal["plain", "base64"] = "plain"


def _named(name: str) -> str:
    # Sources and notices share one level of the path, so their names must differ.
    if name in NOTICES or not re.fullmatch(_ID, name):
        raise ValueError(f"not a name of a source, or one of {', '.join(NOTICES)}")
    return name


class _Form(_Strict):
    sources: Annotated[dict[Annotated[str, AfterValidator(_named)], Source], Field(min_length=1)]


Sources = Mapping[str, Source]


def read(members: object) -> Sources:
    """
    Read a mapping that was parsed.

    Raises:
        Unsafe: One sentence for each fault, with its place.
    """
    try:
        return _Form.model_validate(members).sources
    except ValidationError as error:
        faults = [_sentence(e["loc"], e["type"], e["msg"]) for e in error.errors()]
    raise Unsafe(f"The OpenRTB mapping is not usable: {' '.join(faults)}")


def load(file: File) -> Sources:
    """
    Read the mapping out of a TOML or JSON file, by the end of its name.

    Raises:
        Unsafe: It cannot be read, is neither, or has faults.
    """
    try:
        raw = file.read_bytes()
    except OSError as error:
        raise Unsafe(f"The OpenRTB mapping cannot be read: {error.strerror}.") from error
    if len(raw) > BYTES_MAX:
        raise Unsafe(f"The OpenRTB mapping is longer than {BYTES_MAX} bytes.")
    try:
        text = raw.decode("utf-8")
        members = tomllib.loads(text) if file.suffix == ".toml" else json.loads(text)
    except (ValueError, RecursionError) as error:
        kind = "TOML" if file.suffix == ".toml" else "JSON"
        raise Unsafe(f"The OpenRTB mapping is not {kind} in UTF-8: {error}.") from error
    return read(members)


def _sentence(place: tuple[int | str, ...], kind: str, message: str) -> str:
    where = ".".join(str(part) for part in place if part != "[key]") or "the file"
    if kind == "extra_forbidden":
        return f"{where}: there is no such field."
    reason = message.removeprefix("Value error, ")
    return f"{where}: {reason[0].lower()}{reason[1:].rstrip('.')}."
