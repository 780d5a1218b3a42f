"""The overview diagram of a patient's way to a bed, as inline SVG of our own layout, narrow enough for a phone."""

from __future__ import annotations

from collections.abc import Iterator
from html import escape

DESCRIPTION = (
    "A patient arrives at the home unit. If the home's own gate is open and a bed is free, the "
    "patient is admitted at home. If "
    "the gate is closed with a bed free, some are admitted all the same, where the scenario says so. "
    "Else the units of the "
    "referral order are asked; the first with an open incoming gate and a free bed takes the "
    "patient, a transfer. If none "
    "does, the last resort decides: a bed at home, any free bed, or turned away."
)
WIDTH, LEFT, BOX, HIGH, STEP = 360, 10, 196, 52, 96
OUT, OUT_WIDTH = 250, 104
# each step: what is asked, and where a yes leads
STEPS = (
    (("1  Home: own gate open", "and a bed free?"), ("admitted", "at home")),
    (("2  Own gate closed, bed free:", "admitted all the same?"), ("admitted", "at home")),
    (("3  Referral order: a unit with", "open gate and free bed?"), ("transfer, then", "admitted there")),
    (("4  Last resort of the", "scenario: a bed after all?"), ("admitted at", "home or elsewhere")),
)


def patient_flow(prefix: str, title: str) -> str:
    """The diagram as an SVG element. prefix: of every id in it."""
    height = 76 + STEP * len(STEPS) + 44
    parts = "".join([*_start(), *_steps(prefix), *_end(prefix)])
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {WIDTH} {height}" width="{WIDTH}" height="{height}" '
        f'role="img" aria-labelledby="{prefix}-title {prefix}-desc" focusable="false" '
        f'font-family="sans-serif" font-size="12.5">'
        f'<title id="{prefix}-title">{escape(title)}</title><desc id="{prefix}-desc">{escape(DESCRIPTION)}</desc>'
        f'<defs><marker id="{prefix}-arrow" viewBox="0 0 8 8" refX="7" refY="4" markerWidth="7" markerHeight="7" '
        f'orient="auto"><path d="M0 0 L8 4 L0 8 z" fill="#1a1a1a"/></marker></defs>{parts}</svg>'
    )


def _start() -> Iterator[str]:
    yield f'<rect x="{LEFT}" y="8" width="{BOX}" height="40" rx="20" fill="#e8eef4" stroke="#1a1a1a"/>'
    yield _text(LEFT + BOX / 2, 33, "arrival of a home's patient")


def _steps(prefix: str) -> Iterator[str]:
    for place, (asked, outcome) in enumerate(STEPS):
        top, middle = 76 + STEP * place, LEFT + BOX / 2
        yield _arrow(prefix, middle, top - (28 if place == 0 else STEP - HIGH), middle, top)
        if place:
            yield _text(middle + 14, top - (STEP - HIGH) / 2 + 4, "no")
        yield f'<rect x="{LEFT}" y="{top}" width="{BOX}" height="{HIGH}" fill="#ffffff" stroke="#1a1a1a"/>'
        yield from (_text(middle, top + 22 + 18 * line, words) for line, words in enumerate(asked))
        yield _arrow(prefix, LEFT + BOX, top + HIGH / 2, OUT, top + HIGH / 2)
        yield _text((LEFT + BOX + OUT) / 2 - 2, top + HIGH / 2 - 5, "yes")
        yield f'<rect x="{OUT}" y="{top}" width="{OUT_WIDTH}" height="{HIGH}" rx="8" fill="#e6f0e6" stroke="#1a1a1a"/>'
        yield from (
            _text(OUT + OUT_WIDTH / 2, top + 22 + 18 * line, words) for line, words in enumerate(outcome)
        )


def _end(prefix: str) -> Iterator[str]:
    top, middle = 76 + STEP * len(STEPS), LEFT + BOX / 2
    yield _arrow(prefix, middle, top - (STEP - HIGH), middle, top)
    yield _text(middle + 14, top - (STEP - HIGH) / 2 + 4, "no")
    yield f'<rect x="{LEFT}" y="{top}" width="{BOX}" height="36" rx="8" fill="#f6e3e0" stroke="#1a1a1a"/>'
    yield _text(middle, top + 23, "turned away")


def _arrow(prefix: str, x1: float, y1: float, x2: float, y2: float) -> str:
    return (
        f'<line x1="{x1:g}" y1="{y1:g}" x2="{x2:g}" y2="{y2:g}" stroke="#1a1a1a" stroke-width="1.5" '
        f'marker-end="url(#{prefix}-arrow)"/>'
    )


def _text(x: float, y: float, words: str) -> str:
    return f'<text x="{x:g}" y="{y:g}" text-anchor="middle" fill="#1a1a1a">{escape(words)}</text>'
