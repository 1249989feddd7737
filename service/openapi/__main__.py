"""Write the OpenAPI document anew."""

from service.openapi import COMMITTED, build, written

COMMITTED.write_text(written(build()) + "\n", encoding="utf-8")
