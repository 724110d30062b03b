"""Which pages `make screens` looks at, and how it gets to them by following links."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

from playwright.sync_api import Page, expect

MISTAKEN = """aldehyde + amine <--k_1 / k_2--> imine + water
imine + amine --k_3--> aminal
obesrve bound = [imine] + [aminal]
"""
EXPORT = (
    "Spectrometer; no. 2\n\nt / min;I(aldehyde);I(imine);I(standard)\n"
    + "".join(f"{i};{60 - 2 * i},5;{2 * i},25;12,0\n" for i in range(20))
)  # fmt: skip


class Tour:
    """A browser that walks through the invented project."""

    def __init__(self, page: Page):
        self.page = page
        self._account: tuple[str, str] | None = None
        self._links: dict[str, str] = {}

    def log_in_later(self, name: str, password: str) -> None:
        self._account = name, password

    def log_in(self) -> None:
        """Log in, once."""
        if self._account is None:
            return
        (name, password), self._account = self._account, None
        self.page.goto("/login/")
        self.page.fill("[name=username]", name)
        self.page.fill("[name=password]", password)
        self.page.get_by_role("button", name="Log in").click()
        expect(self.page.get_by_role("button", name="Log out")).to_be_visible()

    def project(self, rest: str = "") -> str:
        """Address of the invented project or of one of its pages."""
        return self.link("/", "main a[href^='/projects/']:not([href='/projects/new/'])") + rest

    def link(self, address: str, selector: str) -> str:
        """Where the first such link of a page leads; looked up once."""
        key = f"{address} {selector}"
        if key not in self._links:
            self.page.goto(address)
            found = self.page.locator(selector).first.get_attribute("href")
            assert found, key
            self._links[key] = found
        return self._links[key]

    def go(self, address: str) -> None:
        self.page.goto(address)

    @property
    def run(self) -> str:
        return self.link(self.project("runs/"), "table.runs tbody th > a")

    @property
    def signals(self) -> str:
        return self.link(self.run, "main a[href^='/signals/']")

    @property
    def table(self) -> str:
        return self.link(self.run, "main a[href^='/tables/']:not([href$='.csv'])")

    @property
    def fit(self) -> str:
        return self.link(self.project("evidence/"), ".grid thead a[href^='/fits/']")

    @property
    def version(self) -> str:
        return self.link(self.project("evidence/"), ".grid thead a[href^='/versions/']")

    @property
    def dataset(self) -> str:
        return self.link(self.project("datasets/"), "table a[href^='/datasets/']")


def number_of(address: str) -> str:
    """The number in an address such as /runs/17/."""
    return address.strip("/").split("/")[-1]


@dataclass(frozen=True)
class Screen:
    """One page: its name, what a person does there, the way to it."""

    name: str
    words: str
    show: Callable[[Tour], None]
    dark: bool = False
    at: str = ""
    """scrolled to this element"""
    is_public: bool = False


def within(rest: str) -> Callable[[Tour], None]:
    """A page of the project."""
    return lambda tour: tour.go(tour.project(rest))


def revisable(tour: Tour) -> None:
    tour.go(f"{tour.run}revise/")


def copied(tour: Tour) -> None:
    tour.go(tour.project(f"runs/new/?copy={number_of(tour.run)}"))
    tour.page.fill("[name=code]", "T-25")
    tour.page.fill("[name='charges-1-amount']", "79.5")
    expect(tour.page.locator("#amounts")).to_contain_text("79.5 ± 0.3 mg")


def understood(tour: Tour) -> None:
    tour.go(f"{tour.run}files/new/")
    file = {"name": "export.csv", "mimeType": "text/csv", "buffer": EXPORT.encode()}
    tour.page.set_input_files("[name=file]", file)  # type: ignore[arg-type]
    tour.page.get_by_role("button", name="Show what is understood").click()
    expect(tour.page.locator("#options")).to_be_visible()


def mistaken(tour: Tour) -> None:
    tour.go(tour.project("mechanisms/new/"))
    tour.page.fill("#id_name", "condensation")
    tour.page.fill("#id_text", MISTAKEN)
    expect(tour.page.locator("#checked .problems")).to_be_visible()


def written(tour: Tour) -> None:
    tour.go(tour.project(f"mechanisms/new/?from={number_of(tour.version)}"))
    expect(tour.page.locator("#checked .network")).to_be_visible()


def asked(tour: Tour) -> None:
    tour.go(tour.project(f"fits/new/?like={number_of(tour.fit)}"))


def under_way(tour: Tour) -> None:
    """A fit from many starts, which takes long enough to be looked at."""
    asked(tour)
    tour.page.fill("[name$='starts'][inputmode]", "500")
    tour.page.fill("[name$='seed']", str(int(time.time())))  # the same request would lead to the fit before
    tour.page.get_by_role("button", name="Ask for the fit").click()
    expect(tour.page.locator("#progress")).to_contain_text("iteration", timeout=60_000)


def stopped(tour: Tour) -> None:
    """The fit before, stopped."""
    tour.page.get_by_role("button", name="Stop it").click()
    expect(tour.page.get_by_role("button", name="Try again")).to_be_visible(timeout=60_000)


SCREENS = (
    Screen("login", "name and password", lambda tour: tour.go("/login/"), is_public=True),
    Screen("home", "projects, and where one left off", lambda tour: tour.go("/")),
    Screen("new-project", "begin a project", lambda tour: tour.go("/projects/new/")),
    Screen("project", "the state of a project at a glance", within(""), dark=True),
    Screen("members", "who may read and write", within("members/")),
    Screen("search", "run codes, compounds, mechanisms, datasets", lambda tour: tour.go("/search/?q=a")),
    Screen("materials", "compounds, lots and stocks", within("materials/")),
    Screen("new-compound", "enter a compound", within("materials/compounds/new/")),
    Screen("new-lot", "enter a bottle with its purity", within("materials/lots/new/")),
    Screen("new-stock", "make up a solution", within("materials/stocks/new/")),
    Screen("runs", "the runs, each with a small curve", within("runs/"), dark=True),
    Screen("runs-filtered", "only runs that fit conditions", within("runs/?q=25 degC")),
    Screen("new-run", "log a run from a copy; start concentrations appear while amounts are typed", copied, dark=True),
    Screen("run", "a run: conditions, charges, curves, which models explain it", lambda tour: tour.go(tour.run)),
    Screen("run-curves", "its concentrations", lambda tour: tour.go(tour.run), at="#tables", dark=True),
    Screen("revise-run", "write the next revision of a run", revisable),
    Screen("new-file", "give a run its instrument file", lambda tour: tour.go(f"{tour.run}files/new/")),
    Screen("new-file-understood", "what was understood of it, before anything is stored", understood),
    Screen("signals", "the signals of a file", lambda tour: tour.go(tour.signals)),
    Screen("reduce", "from signals to concentrations", lambda tour: tour.go(f"{tour.signals}reduce/")),
    Screen("table", "concentrations with their uncertainties", lambda tour: tour.go(tour.table)),
    Screen("supersede-table", "put a newer table in its place", lambda tour: tour.go(f"{tour.table}supersede/")),
    Screen("mechanisms", "rival mechanisms and their versions", within("mechanisms/")),
    Screen("new-mechanism", "a mechanism, checked while it is written", mistaken, dark=True),
    Screen("new-mechanism-right", "what is understood of it", written),
    Screen("version", "a version of a mechanism", lambda tour: tour.go(tour.version)),
    Screen("datasets", "frozen choices of tables", within("datasets/")),
    Screen("new-dataset", "choose tables", within("datasets/new/")),
    Screen("dataset", "a dataset", lambda tour: tour.go(tour.dataset)),
    Screen("new-fit", "ask for a fit: who plays whom, where the constants begin", asked),
    Screen("new-fit-constants", "its constants", asked, at="section:has(> .work > #constants)"),
    Screen("fits", "the fits of a project", within("fits/")),
    Screen("fit", "what came out of a fit", lambda tour: tour.go(tour.fit), dark=True),
    Screen("fit-run", "one of its runs", lambda tour: tour.go(tour.fit), at="article.leaf", dark=True),
    Screen("fit-more", "causes of error", lambda tour: tour.go(tour.fit), at="#pulls"),
    Screen("evidence", "which model explains which run", within("evidence/"), dark=True),
    Screen("account", "time zone and password", lambda tour: tour.go("/account/")),
    Screen("tokens", "keys for scripts", lambda tour: tour.go("/account/tokens/")),
    Screen("not-found", "an address that leads nowhere", lambda tour: tour.go("/runs/999999/")),
    Screen("fit-under-way", "a fit while it is computed", under_way),
    Screen("fit-stopped", "a fit that was stopped", stopped),
)  # fmt: skip
"""In this order, since the last ones write something."""
