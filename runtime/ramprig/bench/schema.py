"""The JSON Schema of bench files, for editors: made from the declarations that read them."""

from __future__ import annotations

from ..yamlfile import Schema
from .bench import BENCH

DIALECT = "https://json-schema.org/draft/2020-12/schema"


def bench_schema() -> Schema:
    """A JSON Schema (2020-12) of a bench file. What depends on several values (duty above a ceiling) is not in it."""
    return {"$schema": DIALECT, "title": "ramprig bench file"} | BENCH.schema()
