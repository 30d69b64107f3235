"""bidkeel openrtb explain: what a mapping makes of one bid request, without a server."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

from service.errors import Malformed
from service.openrtb import mapping
from service.openrtb.bodies import BadBody, parsed
from service.openrtb.explaining import explain, lines_of


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """The two files, and which source is meant where the mapping names several."""
    parser.add_argument("--mapping", type=Path, required=True, help="TOML or JSON file")
    parser.add_argument("--request", type=Path, required=True, help="file with one bid request")
    parser.add_argument("--source", help="name of a source; needed where there are several")
    parser.add_argument("--json", action="store_true", help="one JSON object")


def run(arguments: argparse.Namespace) -> int:
    """Exit code 0 when the request would be priced, 3 when nobody would be asked."""
    sources = mapping.load(arguments.mapping)
    name = arguments.source or next(iter(sources))
    # To guess one of several would explain a request by the wrong exchange's rules.
    if name not in sources or (arguments.source is None and len(sources) > 1):
        raise Malformed("no_such_source", f"Name one source of {', '.join(sorted(sources))}.")
    told = explain(name, sources[name], _read(arguments.request))
    text = json.dumps(told, indent=1) if arguments.json else "\n".join(lines_of(told))
    sys.stdout.write(f"{text}\n")
    return 0 if any(imp["asks"] for imp in told.get("imps", ())) else 3


def _read(file: Path) -> object:
    try:
        return parsed(file.read_bytes())
    except OSError as error:
        raise Malformed("no_request", f"The request cannot be read: {error.strerror}.") from error
    except BadBody as error:
        raise Malformed("bad_json", "The request is not JSON in UTF-8.") from error
