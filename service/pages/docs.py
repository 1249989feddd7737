"""The API page: Swagger UI from files of an installed package, so that nothing is fetched from outside."""

from importlib.util import find_spec
from pathlib import Path

from service.representations.page import LINKS

POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data:; "
    "connect-src 'self'; base-uri 'none'; form-action 'none'; frame-ancestors 'none'"
)
"""Content-Security-Policy of the API page; Swagger UI sets styles on its elements."""

ASSETS = {
    "swagger-ui-bundle.js": "text/javascript",
    "swagger-ui.css": "text/css",
    "favicon.png": "image/png",
}
"""File to media type."""

NAVIGATION = "".join(f'<a href="{path}" style="margin-right:1.2rem">{name}</a>' for path, name in LINKS)
PAGE = f"""<!doctype html>
<html lang="en"><head><meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>tailrace API</title>
<link rel="icon" href="/docs/favicon.png"><link rel="stylesheet" href="/docs/swagger-ui.css"></head>
<body><nav aria-label="tailrace" style="padding:1rem 1.25rem 0;font:15px sans-serif">{NAVIGATION}</nav>
<div id="page"></div>
<script src="/docs/swagger-ui-bundle.js"></script><script src="/docs/start.js"></script></body></html>
"""

START = """SwaggerUIBundle({
  url: "/openapi.json", dom_id: "#page", deepLinking: true, validatorUrl: null,
  presets: [SwaggerUIBundle.presets.apis], layout: "BaseLayout", defaultModelsExpandDepth: 0
});
"""


def asset(name: str) -> Path:
    """Return the file `name` of the package that ships Swagger UI, without importing it."""
    found = find_spec("fastapi_offline")
    if found is None or found.origin is None:
        raise FileNotFoundError("the package fastapi-offline, which has the files of the API page, is not installed")
    return Path(found.origin).parent / "static" / name
