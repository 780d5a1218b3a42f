"""The report as PDF, by a Chromium that the machine already has."""

from __future__ import annotations

import os
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory

from sim.errors import RunError

VARIABLE = "BRIMLINE_CHROMIUM"
NAMES = (
    "chromium",
    "chromium-browser",
    "google-chrome",
    "google-chrome-stable",
    "chrome",
    "chrome-headless-shell",
)
CACHES = (".cache/ms-playwright", "Library/Caches/ms-playwright", "AppData/Local/ms-playwright")
BINARIES = (
    "chrome",
    "chrome-headless-shell",
    "headless_shell",
    "Chromium",
    "chrome.exe",
    "chrome-headless-shell.exe",
)
LONGEST_SECONDS = 180
# no request leaves, whatever the page held; `no-sandbox` only for root, whom the sandbox refuses
OPTIONS = ("--headless", "--disable-gpu", "--no-first-run", "--disable-extensions", "--disable-background-networking",
           "--disable-component-update", "--disable-sync", "--host-resolver-rules=MAP * ~NOTFOUND")  # fmt: skip


def chromium() -> Path | None:
    """The browser: `$BRIMLINE_CHROMIUM`, else one on the PATH, else one in a cache of browsers; None without one."""
    if named := os.environ.get(VARIABLE):
        return Path(named) if Path(named).is_file() else None
    return next(_candidates(), None)


def _candidates() -> Iterator[Path]:
    yield from (Path(found) for one in NAMES if (found := shutil.which(one)))
    for cache in (Path.home() / one for one in CACHES):
        if cache.is_dir():
            yield from sorted(one for one in cache.glob("*/**/*") if one.name in BINARIES and one.is_file())


def options() -> list[str]:
    """How the browser is started."""
    return [*OPTIONS, *(["--no-sandbox"] if hasattr(os, "geteuid") and os.geteuid() == 0 else [])]


def write_pdf(page: Path, pdf: Path) -> None:
    """Prints the page; RunError, with the remedy, where there is no browser or it fails."""
    browser = chromium()
    if browser is None:
        where = f"${VARIABLE} names no file" if os.environ.get(VARIABLE) else "none was found"
        raise RunError(
            f"a PDF needs an installed Chromium, and {where}: set ${VARIABLE} to its program, or print {page} "
            "from any browser"
        )
    with TemporaryDirectory() as profile:
        half = Path(profile) / "report.pdf"
        command = [str(browser), *options(), f"--user-data-dir={profile}/user", "--no-pdf-header-footer",
                   f"--print-to-pdf={half}", page.resolve().as_uri()]  # fmt: skip
        try:
            done = subprocess.run(
                command, capture_output=True, text=True, timeout=LONGEST_SECONDS, check=False
            )
        except (OSError, subprocess.TimeoutExpired) as error:
            raise RunError(f"{browser} could not print {page}: {error}") from None
        if done.returncode != 0 or not half.is_file():
            last = (done.stderr.strip().splitlines() or ["no word of why"])[-1]
            raise RunError(f"{browser} could not print {page}: {last}")
        shutil.move(half, pdf)
