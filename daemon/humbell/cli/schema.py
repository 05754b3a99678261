"""`humbell schema`."""

import json

from humbell.config import Site


def run() -> None:
    """Print the JSON Schema (draft 2020-12) of the configuration."""
    print(json.dumps({"$schema": "https://json-schema.org/draft/2020-12/schema"} | Site.model_json_schema(), indent=2))
