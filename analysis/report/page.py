"""The report as one HTML page that asks for nothing outside itself."""

from __future__ import annotations

import base64
import hashlib
from functools import cache
from importlib.resources import files
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

import sim
from analysis.report.contents import Report
from analysis.report.words import GAP

STYLE = "page.css"


@cache
def _templates() -> Environment:
    found = Environment(
        loader=PackageLoader("analysis.report", "templates"), autoescape=True, undefined=StrictUndefined,
        trim_blocks=True, lstrip_blocks=True,
    )  # fmt: skip
    found.tests["block"] = lambda block, kind: type(block).__name__ == kind
    found.filters["svg"] = Markup  # drawn and escaped by us, word by word
    return found


def style() -> str:
    """The page's one style sheet."""
    return files("analysis.report").joinpath("templates", STYLE).read_text(encoding="utf-8")


def policy(sheet: str) -> str:
    """The content security policy: nothing is loaded, nothing runs, and no style but the sheet's own applies."""
    digest = base64.b64encode(hashlib.sha256(sheet.encode()).digest()).decode()
    return (
        f"default-src 'none'; style-src 'sha256-{digest}'; img-src data:; base-uri 'none'; form-action 'none'"
    )


def to_html(report: Report) -> str:
    """The whole page. The same report gives the same bytes."""
    sheet = style()
    matter: dict[str, Any] = {
        "report": report, "style": Markup(sheet), "policy": policy(sheet), "gap": GAP, "version": sim.__version__,
    }  # fmt: skip
    return _templates().get_template("page.html").render(matter)
