"""The settings that the routes obey, named here so that api depends on no settings class."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol, cast

from pydantic import SecretStr
from starlette.requests import Request


class EdgeSettings(Protocol):
    """Limits of bodies in bytes and rows, and the key of the health routes, if they have one."""

    @property
    def body_bytes_max(self) -> int: ...

    @property
    def batch_bytes_max(self) -> int: ...

    @property
    def batch_rows_max(self) -> int: ...

    @property
    def outcome_rows_max(self) -> int: ...

    @property
    def health_key(self) -> SecretStr | None: ...

    @property
    def metrics_port(self) -> int: ...


@dataclass(frozen=True, slots=True)
class Edge:
    """The limits that the contract states, for an app without settings."""

    body_bytes_max: int = 1024 * 1024
    batch_bytes_max: int = 4 * 1024 * 1024
    batch_rows_max: int = 500
    outcome_rows_max: int = 1000
    health_key: SecretStr | None = None
    metrics_port: int = 0


def edge(request: Request) -> EdgeSettings:
    """The settings of the app that this request came to, as app.py hangs them there."""
    return cast(EdgeSettings, getattr(request.app.state, "settings", None) or Edge())
