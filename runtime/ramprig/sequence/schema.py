"""The JSON Schema of sequence files, for editors: made from the same declarations that read them."""

from __future__ import annotations

from ramprig.yamlfile import Record, Schema

from .reading import FILE_KEYS, SCHEMA_LANGUAGE


def sequence_schema() -> Schema:
    """The schema, in the 2020-12 draft of JSON Schema."""
    record: Record[object] = Record(FILE_KEYS, lambda fields: fields)
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "ramprig sequence file",
        **record.schema(),
        "$defs": {"step": SCHEMA_LANGUAGE.step.whole_schema()},
    }
