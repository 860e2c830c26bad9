"""`modepair schema`."""

from __future__ import annotations

import json

__all__ = ["schema_command"]


def schema_command() -> None:
    """Print the JSON Schema of a spec, for editors."""
    from modepair.sweeps import json_schema

    print(json.dumps(json_schema(), indent=2, ensure_ascii=False))
