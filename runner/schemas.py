"""JSON Schemas of the files that people write, for editors. ``docs/schemas/`` holds them; a test keeps them equal."""

from __future__ import annotations

from typing import Any, Final

from coilwright.geometry.coil import CoilFile
from coilwright.geometry.documents import Model

from .lab import LabFile
from .protocol import Protocol

MODELS: Final[dict[str, type[Model]]] = {"protocol": Protocol, "lab": LabFile, "coil": CoilFile}


def schema(kind: str) -> dict[str, Any]:
    """Return the JSON Schema (2020-12) of a protocol, lab or coil file."""
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "$id": f"urn:coilwright:{kind}:1",
        **MODELS[kind].model_json_schema(),
    }
