"""`make screens`: pictures of every page, taken in the invented project, into docs/screens/.

Starts `manage.py demo` in a folder of its own, looks at each page in two widths, stops it again.
``--at ADDRESS --password FILE`` takes an installation of the invented project that runs already.
"""

from __future__ import annotations

import argparse
import os
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from playwright.sync_api import Page, sync_playwright

from tests.browser.screen_pages import SCREENS, Screen, Tour
from tests.browser.watching import TELL_VIOLATIONS, start_browser, watch
from tests.services.processes import CHECKOUT, free_port

FOLDER = CHECKOUT / "docs" / "screens"
SIZES: tuple[Any, ...] = ({"width": 1280, "height": 900}, {"width": 800, "height": 1100})
START_SECONDS = 300
COLOURS = 128
HEAD = """# Screens

What each page looks like, taken with the invented project of `make demo` at 1280 and at 800 pixels; `make screens`
takes them anew.

| page | | 1280 | 800 | dark |
|---|---|---|---|---|
"""


def main() -> None:
    """Take all pictures, or those whose names are given."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--at", help="address of an installation that runs already")
    parser.add_argument("--password", type=Path, help="its file with the password")
    parser.add_argument("--into", type=Path, default=FOLDER, help="folder of the pictures")
    parser.add_argument("names", nargs="*", help="only these")
    options = parser.parse_args()
    chosen = [screen for screen in SCREENS if not options.names or screen.name in options.names]
    options.into.mkdir(parents=True, exist_ok=True)
    if options.at:
        take(chosen, options.at, options.password.read_text().strip(), options.into)
    else:
        with demonstration() as (address, password):
            take(chosen, address, password, options.into)
    if len(chosen) == len(SCREENS):
        remove_others(options.into)
        (options.into / "README.md").write_text(HEAD + "".join(line_of(screen) for screen in SCREENS))


@contextmanager
def demonstration() -> Iterator[tuple[str, str]]:
    """The invented project on a free port in a temporary folder: its address and the password of 'demo'."""
    var = Path(tempfile.mkdtemp(prefix="rw-screens-"))
    port = free_port()
    log = var / "demo.txt"
    with log.open("w") as out:
        process = subprocess.Popen(
            [sys.executable, "manage.py", "demo", "--port", str(port)],
            cwd=CHECKOUT,
            env={**os.environ, "RATEWRIGHT_VAR": str(var / "var")},
            stdout=out,
            stderr=subprocess.STDOUT,
            start_new_session=True,  # Ctrl-C is for this script, which then stops it in order
        )
    try:
        end = time.monotonic() + START_SECONDS
        while "Stop it with Ctrl-C." not in log.read_text():
            if process.poll() is not None or time.monotonic() > end:
                raise SystemExit(f"the invented project did not come up:\n{log.read_text()}")
            time.sleep(0.2)
        yield f"http://127.0.0.1:{port}", (var / "var" / "demo-password.txt").read_text().strip()
    finally:
        process.send_signal(signal.SIGINT)
        process.wait(60)
        shutil.rmtree(var, ignore_errors=True)


def take(screens: list[Screen], address: str, password: str, folder: Path) -> None:
    """Look at each page and keep what is seen."""
    complaints: list[str] = []
    with sync_playwright() as playwright:
        browser = start_browser(playwright)
        context = browser.new_context(base_url=address, viewport=SIZES[0], color_scheme="light")
        context.add_init_script(TELL_VIOLATIONS)
        page = context.new_page()
        watch(page, complaints)
        tour = Tour(page)
        taken: list[Path] = []
        tour.log_in_later("demo", password)
        for screen in screens:
            if not screen.is_public:
                tour.log_in()
            screen.show(tour)
            taken += pictures(page, screen, folder)
            sys.stdout.write(f"{screen.name}\n")
            sys.stdout.flush()
        browser.close()
    expected = [text for text in complaints if "404" in text]  # the page of an address that leads nowhere
    if len(expected) < len(complaints):
        raise SystemExit("\n".join(complaints))
    shrink(taken)


def pictures(page: Page, screen: Screen, folder: Path) -> list[Path]:
    """A picture for each size, and a dark one where the screen asks for it."""
    wanted: list[tuple[Any, str, str]] = [(size, "light", "") for size in SIZES]
    if screen.dark:
        wanted.append((SIZES[0], "dark", "-dark"))
    found = []
    for size, scheme, ending in wanted:
        page.set_viewport_size(size)
        page.emulate_media(color_scheme=scheme)  # type: ignore[arg-type]
        if screen.at:
            page.locator(screen.at).first.evaluate("node => node.scrollIntoView()")
        page.wait_for_timeout(350)  # charts are drawn anew for another width
        file = folder / f"{screen.name}-{size['width']}{ending}.png"
        page.screenshot(path=file)
        found.append(file)
    page.emulate_media(color_scheme="light")
    page.set_viewport_size(SIZES[0])
    return found


def shrink(files: list[Path]) -> None:
    """Fewer colours make the pictures a third of their size; without ImageMagick they stay as they are."""
    tool = shutil.which("convert")
    for file in files if tool else []:
        options = [
            "-dither",
            "None",
            "-colors",
            str(COLOURS),
            "-strip",
            "-define",
            "png:exclude-chunks=date,time",
        ]
        subprocess.run([str(tool), str(file), *options, f"PNG8:{file}"], check=True)


def remove_others(folder: Path) -> None:
    """Pictures of pages that are no more."""
    wanted = {name for screen in SCREENS for name in files_of(screen)}
    for file in folder.glob("*.png"):
        if file.name not in wanted:
            file.unlink()


def files_of(screen: Screen) -> list[str]:
    return [
        f"{screen.name}-1280.png",
        f"{screen.name}-800.png",
        *([f"{screen.name}-1280-dark.png"] * screen.dark),
    ]


def line_of(screen: Screen) -> str:
    """The screen's line in the list."""
    wide, narrow, *dark = (
        f"[{words}]({name})"
        for words, name in zip(("wide", "narrow", "dark"), files_of(screen), strict=False)
    )
    return f"| {screen.name} | {screen.words} | {wide} | {narrow} | {''.join(dark)} |\n"


if __name__ == "__main__":
    main()
