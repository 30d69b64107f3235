"""`bidkeel settings`: every setting with its default and its reason, out of the class itself."""

from __future__ import annotations

import argparse
import json
import sys
from typing import Any

from pydantic import SecretStr

from service.settings import PREFIX, Settings


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's options."""
    parser.add_argument("--json", action="store_true", help="print them for a program")
    parser.add_argument("--markdown", action="store_true", help="print them as a table in Markdown")


def run(arguments: argparse.Namespace) -> int:
    """Print what may be set; no value of this installation is read."""
    if arguments.json:
        sys.stdout.write(json.dumps({"settings": rows()}, ensure_ascii=False) + "\n")
    elif arguments.markdown:
        sys.stdout.write(markdown())
    else:
        for row in rows():
            sys.stdout.write(f"{row['name']}={row['default']}\n    {row['description']}\n")
    return 0


def rows() -> list[dict[str, str]]:
    """Name, default and description of each setting, in the order of the class."""
    return [
        {
            "name": f"{PREFIX}{name.upper()}",
            "default": _default(field.default),
            "description": str(field.description),
        }
        for name, field in Settings.model_fields.items()
    ]


def markdown() -> str:
    """The table for people."""
    lines = ["| variable | default | what it is |", "|---|---|---|"]
    for row in rows():
        default = f"`{row['default']}`" if row["default"] else ""
        lines.append(f"| `{row['name']}` | {default} | {row['description'].replace('|', ' or ')} |")
    return "\n".join(lines) + "\n"


def _default(value: Any) -> str:
    # Defaults are in the source for everybody to read, so none of them is a secret.
    if isinstance(value, SecretStr):
        return value.get_secret_value()
    return "" if value is None else str(value)
