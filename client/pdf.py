"""A page printed on A4 by a browser of the machine, if there is one."""

from __future__ import annotations

import shutil
import subprocess
import tempfile
from pathlib import Path

from nearhand.service.errors import ConfigError, StoreError

#: Commands under which the browser's engine is commonly installed.
BROWSERS = ("chromium", "chromium-browser", "google-chrome", "chrome")
TIMEOUT_S = 60.0


def print_page(page: Path, pdf: Path) -> None:
    """Print an HTML file as PDF.

    Raises:
        ConfigError: there is no browser.
        StoreError: it did not print.
    """
    found = next((path for name in BROWSERS if (path := shutil.which(name))), None)
    if found is None:
        raise ConfigError(
            f"a PDF is printed by a browser, and none of {', '.join(BROWSERS)} is installed; install one, or print "
            f"{page} from any browser",
            code="config.browser",
        )
    with tempfile.TemporaryDirectory(prefix="nearhand-") as profile:
        words = [
            found, "--headless", "--no-sandbox", "--disable-gpu", "--no-first-run", "--disable-background-networking",
            "--disable-component-update", "--disable-sync", "--no-pdf-header-footer", f"--user-data-dir={profile}",
            f"--print-to-pdf={pdf.resolve()}", page.resolve().as_uri(),
        ]  # fmt: skip
        try:
            done = subprocess.run(words, capture_output=True, text=True, timeout=TIMEOUT_S, check=False)
        except subprocess.TimeoutExpired as error:
            raise StoreError(f"{found} did not print {page} within {TIMEOUT_S:g} s", code="store.pdf") from error
    if done.returncode or not pdf.exists():
        last = (done.stderr.strip().splitlines() or ["it said nothing"])[-1]
        raise StoreError(f"{found} could not print {page}: {last}", code="store.pdf")
