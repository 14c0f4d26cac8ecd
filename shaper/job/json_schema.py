"""The job file's JSON Schema, for editors: made from the same model that checks every job.

``job.schema.json`` beside this file is its stored form; an editor finds it through the first
line of a job, ``#:schema <path>/job.schema.json``. A test holds the two equal.
"""

from __future__ import annotations

import json
from pathlib import Path

from shaper.job.schema import JobFile

SCHEMA_FILE = Path(__file__).with_name("job.schema.json")
_DIALECT = "https://json-schema.org/draft/2020-12/schema"


def job_json_schema() -> dict:
    """JSON Schema (draft 2020-12) of a job file, a description at every key.

    It holds what a schema can say: keys, types, ranges. What ties keys together (one form of
    target, whole samples) only ``read_job`` checks.
    """
    schema = JobFile.model_json_schema()
    _tidy(schema)
    return {"$schema": _DIALECT, "title": "shaper job", **schema}


def schema_text() -> str:
    """The stored form: sorted as the model is, one key a line."""
    return json.dumps(job_json_schema(), indent=2, ensure_ascii=False) + "\n"


def _tidy(node: object) -> None:
    """Without made-up titles ("T1 Us"), and without null, which TOML does not know."""
    if isinstance(node, list):
        for item in node:
            _tidy(item)
    if not isinstance(node, dict):
        return
    if isinstance(node.get("title"), str):
        del node["title"]
    if "default" in node and node["default"] is None:
        del node["default"]
    options = [o for o in node.get("anyOf", []) if o != {"type": "null"}]
    if len(options) == 1:
        del node["anyOf"]
        node.update(options[0] | {k: v for k, v in node.items() if k == "description"})
    elif options:
        node["anyOf"] = options
    for key, value in node.items():
        if key == "properties":  # a key of ours may itself be called "title"
            for item in value.values():
                _tidy(item)
        elif key == "$defs":
            for item in value.values():
                _tidy(item)
        else:
            _tidy(value)
