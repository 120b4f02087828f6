"""``python -m deckgen.stage.json_schema`` writes the published JSON Schema of a stage file anew."""

from __future__ import annotations

import json
from pathlib import Path


def schema_file() -> Path:
    """Where the published schema lies in the package."""
    return Path(__file__).resolve().parent.parent / "schemas" / "stage-1.json"


def schema_text() -> str:
    """Generate the schema from the models that read a stage file."""
    from deckgen.stage.schema import stage_json_schema

    return json.dumps(stage_json_schema(), indent=2, ensure_ascii=False) + "\n"


if __name__ == "__main__":
    schema_file().write_text(schema_text(), encoding="utf-8")
