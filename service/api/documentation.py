"""The page on which people try the API, apart because it must work without the internet."""

from __future__ import annotations

import re
from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi
from pydantic import BaseModel
from starlette.requests import Request
from starlette.responses import FileResponse, HTMLResponse, Response
from swagger_ui_bundle import swagger_ui_path

from service.api import answers
from service.api.direct import direct_router
from service.api.forms.schemas import COMPONENTS
from service.api.problems import MEDIA_TYPE
from service.errors import NotFound

CAUTIONS = """Prices for impression opportunities, never beyond the budget.

Rehearse before money rides on it: `"test": true` answers without setting money aside.
Send no personal data and no protected traits, in features, ids or reasons; consent and local
law come first. Nothing here is legal advice: ask licensed counsel."""

router = direct_router()

_IN_PATHS = re.compile(r"{([a-z_]+)}")
_WHOLE = ("limit", "before", "number")

FILES = ("swagger-ui.css", "swagger-ui-bundle.js", "favicon-32x32.png")
PAGE = """<!doctype html>
<html lang="en"><head><meta charset="utf-8"><title>Bidkeel API</title>
<link rel="icon" href="/docs/favicon-32x32.png">
<link rel="stylesheet" href="/docs/swagger-ui.css"></head>
<body><div id="page"></div>
<script src="/docs/swagger-ui-bundle.js"></script>
<script src="/docs/start.js"></script></body></html>
"""
# The page asks no other host for a verdict on the description, so validatorUrl is null.
START = """SwaggerUIBundle({url: "/openapi.json", dom_id: "#page", validatorUrl: null});
"""
POLICY = {
    "Content-Security-Policy": "default-src 'self'; img-src 'self' data:; "
    # The page sets styles in place; scripts get no such leave.
    "style-src 'self' 'unsafe-inline'; frame-ancestors 'none'"
}

# The older of the packages that carry the page reads OpenAPI up to 3.0.
OPENAPI_VERSION = "3.0.3"


def described(
    summary: str,
    scope: str | None = None,
    form: type[BaseModel] | None = None,
    headers: tuple[str, ...] = (),
    query: tuple[str, ...] = (),
) -> dict[str, Any]:
    """
    What the description says of a route beside its path, as keywords for the route.

    Args:
        summary: One sentence.
        scope: The scope a key needs; None if the route is open.
        form: The form of the body, if the route reads one.
        headers: Names of headers it reads.
        query: Names of query parameters it reads.
    """
    extra: dict[str, Any] = {
        "parameters": [_parameter(name, "header") for name in headers]
        + [_parameter(name, "query") for name in query],
    }
    if scope is not None:
        extra["security"] = [{"key": []}]
        summary = f"{summary} Scope: {scope}."
    if form is not None:
        schema = {"$ref": f"#/components/schemas/{form.__name__}"}
        extra["requestBody"] = {
            "required": True,
            "content": {"application/json": {"schema": schema}},
        }
    problem = {MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}
    refused: dict[int | str, dict[str, Any]] = {
        "4XX": {"description": "Refused, nothing changed.", "content": problem}
    }
    return {"summary": summary, "openapi_extra": extra, "responses": refused}


def description(app: FastAPI) -> dict[str, Any]:
    """The OpenAPI description of everything installed, with the forms as we check them."""
    document = get_openapi(
        title="Bidkeel",
        description=CAUTIONS,
        version=app.version,
        openapi_version=OPENAPI_VERSION,
        routes=app.routes,
    )
    components = document.setdefault("components", {})
    components.setdefault("schemas", {}).update(COMPONENTS)
    components["securitySchemes"] = {"key": {"type": "http", "scheme": "bearer"}}
    _name_paths(document)
    return document


@router.get("/openapi.json", include_in_schema=False)
async def get_openapi_json(request: Request) -> Response:
    """The description that the page reads."""
    return answers.json_answer(description(request.app))


@router.get("/docs", include_in_schema=False)
async def get_page(_request: Request) -> Response:
    """The page itself."""
    return HTMLResponse(PAGE, headers=POLICY)


@router.get("/docs/start.js", include_in_schema=False)
async def get_start(_request: Request) -> Response:
    """The one line that starts the page."""
    return Response(START, media_type="text/javascript")


@router.get("/docs/{name}", include_in_schema=False)
async def get_file(request: Request) -> Response:
    """One of the few files that the page is made of, out of the installed package."""
    name = request.path_params["name"]
    # A name out of a path must never choose a file by itself.
    if name not in FILES:
        raise NotFound("not_found", "Not Found.")
    return FileResponse(swagger_ui_path / name)


def _parameter(name: str, place: str) -> dict[str, Any]:
    return {
        "name": name,
        "in": place,
        "required": name == "If-Match" or place == "path",
        "schema": {"type": "integer" if name in _WHOLE else "string"},
    }


def _name_paths(document: dict[str, Any]) -> None:
    for path, operations in document["paths"].items():
        for name in _IN_PATHS.findall(path):
            for operation in operations.values():
                operation.setdefault("parameters", []).append(_parameter(name, "path"))
