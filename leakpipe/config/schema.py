"""The JSON Schema of the configuration, for editors, generated from the models.

`python -m leakpipe.config.schema` prints it; `schema.json` beside this file is its output, and a
test holds the two equal.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from leakpipe.config.models import Config

DIALECT = "https://json-schema.org/draft/2020-12/schema"
FILE = Path(__file__).with_name("schema.json")


def json_schema() -> dict[str, Any]:
    """Return the JSON Schema (draft 2020-12) of a configuration file."""
    schema = Config.model_json_schema()
    schema.pop("title", None)
    return {
        "$schema": DIALECT,
        "title": "leakpipe configuration",
        **schema,
    }


def schema_text() -> str:
    """Return the content of `schema.json`."""
    return json.dumps(json_schema(), indent=1, ensure_ascii=False) + "\n"


if __name__ == "__main__":
    print(schema_text(), end="")
