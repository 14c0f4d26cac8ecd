"""Write again what is made from the code: the job file's JSON Schema and the command reference.

    python scripts/regenerate.py

Tests compare both with the code, so that neither can drift.
"""

from pathlib import Path

from shaper.cli.reference import reference_text
from shaper.job.json_schema import SCHEMA_FILE, schema_text

if __name__ == "__main__":
    reference = Path(__file__).resolve().parent.parent / "shaper" / "REFERENCE.md"
    for path, text in ((SCHEMA_FILE, schema_text()), (reference, reference_text())):
        path.write_text(text, encoding="utf-8")
        print(path)
