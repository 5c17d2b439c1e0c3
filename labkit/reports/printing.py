"""A PDF of a page, printed by a browser of this machine that shows no window."""

import os
import shutil
import subprocess

from labkit.errors import InputError
from labkit.studies.scratch import scratch_folder

BROWSERS = ("chromium", "chromium-browser", "google-chrome")
SECONDS = 120.0
FLAGS = (
    *("--headless=new", "--disable-gpu", "--no-first-run", "--disable-extensions", "--disable-sync"),
    *("--disable-background-networking", "--disable-component-update", "--disable-dev-shm-usage"),
    *("--no-pdf-header-footer", "--generate-pdf-document-outline"),
)


def find_browser() -> str:
    """Return the path of a browser that can print without a window.

    Raises
    ------
    InputError
        When there is none.
    """
    found = next((path for path in map(shutil.which, BROWSERS) if path), None)
    if found is None:
        raise InputError(
            f"a PDF needs one of the browsers {', '.join(BROWSERS)} on the PATH, and there is none; install "
            "one, or leave out --pdf and print the page from any browser."
        )
    return found


def printed(browser: str, page: bytes) -> bytes:
    """Return a page as PDF, printed in a profile of its own that is thrown away.

    Parameters
    ----------
    browser : str
        Path of a browser of the Chromium family.
    page : bytes
        The page; nothing outside it is fetched.

    Raises
    ------
    InputError
        When the browser makes no PDF.
    """
    with scratch_folder() as scratch:
        read, made = scratch / "page.html", scratch / "page.pdf"
        read.write_bytes(page)
        own = [f"--user-data-dir={scratch / 'profile'}", f"--print-to-pdf={made}", read.as_uri()]
        alone = ["--no-sandbox"] if hasattr(os, "geteuid") and os.geteuid() == 0 else []
        try:
            done = subprocess.run(
                [browser, *FLAGS, *alone, *own],
                stdin=subprocess.DEVNULL,
                capture_output=True,
                timeout=SECONDS,
                check=False,
            )
            content = made.read_bytes() if made.is_file() else b""
        except (OSError, subprocess.TimeoutExpired) as error:
            raise _not_printed(browser, str(error)) from None
    if not content.startswith(b"%PDF-"):
        said = (done.stderr.decode(errors="replace").strip().splitlines() or ["it said nothing"])[-1]
        raise _not_printed(browser, f"it ended with status {done.returncode}: {said}")
    return content


def _not_printed(browser: str, why: str) -> InputError:
    return InputError(
        f"{browser} made no PDF ({why.rstrip('.')}); leave out --pdf and print the page from any browser."
    )
