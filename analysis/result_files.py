"""A result as files: `result.json` and `provenance.json` in a folder, with no NaN and no infinity."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

RESULT, PROVENANCE = "result.json", "provenance.json"


def to_json(document: Any, *, ensure_ascii: bool = False) -> str:
    """JSON with no NaN and no infinity."""
    return json.dumps(document, ensure_ascii=ensure_ascii, allow_nan=False, indent=1)


def write_result(folder: Path, document: Any, provenance: dict[str, Any]) -> None:
    """Writes `result.json` and `provenance.json`, each whole or not at all."""
    for name, content in ((RESULT, document), (PROVENANCE, provenance)):
        half = folder / f"{name}.part"
        half.write_text(to_json(content) + "\n", encoding="utf-8")
        half.replace(folder / name)
