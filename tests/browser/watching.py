"""Starting the browser, and hearing everything that it complains about."""

from __future__ import annotations

import os
import shutil

from playwright.sync_api import Browser, Page, Playwright, Request

TELL_VIOLATIONS = """
document.addEventListener("securitypolicyviolation", (event) => {
  console.error(`content policy: ${event.violatedDirective} refused ${event.blockedURI} ${event.sourceFile ?? ""}`);
});
"""


def start_browser(playwright: Playwright) -> Browser:
    """The browser: $CHROMIUM, or `chromium` of the path."""
    path = os.environ.get("CHROMIUM") or shutil.which("chromium") or shutil.which("chromium-browser")
    assert path, "no browser: put chromium on the path or its file into CHROMIUM"
    return playwright.chromium.launch(executable_path=path, args=["--no-sandbox"])


def watch(page: Page, complaints: list[str]) -> None:
    """Write down everything that the browser complains about."""
    page.set_default_timeout(10_000)
    page.on(
        "console",
        lambda m: (
            complaints.append(f"{m.text} {m.location.get('url', '')}")
            if m.type in ("error", "warning")
            else None
        ),
    )
    page.on("pageerror", lambda error: complaints.append(str(error)))
    page.on(
        "requestfailed", lambda request: complaints.append(failure(request)) if failure(request) else None
    )


def failure(request: Request) -> str:
    """Why a request failed; a download is no failure, though the page does not get its answer."""
    reason = str(request.failure or "")
    return "" if reason == "net::ERR_ABORTED" else f"{request.url}: {reason}"
