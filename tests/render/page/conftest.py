"""Pages of invented takes, and one Chromium for all tests that need it."""

from __future__ import annotations

import shutil
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest
import soundfile
from sweepset.models.bias import solve_bias
from sweepset.models.circuit import load_circuit
from sweepset.models.cycle import Cycle, analyse_cycle
from sweepset.models.jfet import Jfet
from sweepset.models.quantity import parse_rate
from sweepset.render.page.data import PageTake, page_data
from sweepset.render.page.write import listening_page

RATE = 48_000


def write_wav(path: Path, samples: np.ndarray, rate: int) -> Path:
    codes = np.rint(samples * 2**23).astype(np.int32) * 256
    soundfile.write(path, codes, rate, subtype="PCM_24")
    return path


@pytest.fixture(scope="session")
def a_cycle() -> Cycle:
    circuit = load_circuit("heron")
    parts = [Jfet.from_idss(-2.1 - 0.25 * n, 4.2e-3) for n in range(4)]
    bias = solve_bias(circuit, parts, parse_rate("9:00"))
    return analyse_cycle(circuit, parts, bias.bus, 256)


@pytest.fixture(scope="session")
def make_page(a_cycle) -> Callable[..., Path]:
    """Return a function that writes a page of takes of the given samples."""

    def make(folder: Path, takes: dict[str, np.ndarray], rate: int = RATE, **asked) -> Path:
        folder.mkdir(parents=True, exist_ok=True)
        shown = [
            PageTake(
                name,
                write_wav(folder / f"{n}.wav", samples, rate),
                (("file", f"{n}.wav"), ("part", name)),
                None if n == 0 else a_cycle,
            )
            for n, (name, samples) in enumerate(takes.items())
        ]
        title = asked.pop("title", "riff.wav")
        data = page_data(title, shown, ("Ears: start quietly.",), **asked)
        page = folder / "listen.html"
        page.write_text(listening_page(data), encoding="utf-8")
        return page

    return make


@pytest.fixture(scope="session")
def chromium() -> Iterator[object]:
    """The system's Chromium, started once."""
    sync_api = pytest.importorskip(
        "playwright.sync_api", reason="needs playwright: pip install playwright"
    )
    with sync_api.sync_playwright() as started:
        browser = started.chromium.launch(
            executable_path=shutil.which("chromium"), args=["--no-sandbox"]
        )
        yield browser
        browser.close()


class Visit:
    """A page open in the browser, and everything it said or asked for meanwhile."""

    def __init__(self, chromium, page: Path, width: int = 1280, scheme: str = "light") -> None:
        self.context = chromium.new_context(
            viewport={"width": width, "height": 900}, color_scheme=scheme, accept_downloads=True
        )
        self.tab = self.context.new_page()
        self.said: list[str] = []
        self.asked: list[str] = []
        self.tab.on("console", lambda message: self.said.append(message.text))
        self.tab.on("pageerror", lambda fault: self.said.append(str(fault)))
        self.tab.on("request", lambda request: self.asked.append(request.url))
        self.tab.on("dialog", lambda dialog: (self.said.append(dialog.message), dialog.dismiss()))
        self.url = page.as_uri()
        self.tab.goto(self.url)

    def begin(self) -> None:
        self.tab.locator("#ready:not([disabled])").click()

    def outside(self) -> list[str]:
        """Requests for anything but the page itself and what it made in memory."""
        return [url for url in self.asked if url != self.url and not url.startswith("blob:")]


@pytest.fixture
def visit(chromium) -> Iterator[Callable[..., Visit]]:
    """Return a function that opens a page; afterwards the page must have been quiet."""
    visits: list[Visit] = []

    def go(page: Path, **asked) -> Visit:
        visits.append(Visit(chromium, page, **asked))
        return visits[-1]

    yield go
    for one in visits:
        one.context.close()
        assert one.said == []
        assert one.outside() == []


@pytest.fixture
def two_tones() -> dict[str, np.ndarray]:
    """Two seconds each of unlike sounds at one level."""
    time = np.arange(2 * RATE) / RATE
    noise = np.random.default_rng(1).normal(0.0, 0.1, len(time))
    return {
        "dry": 0.2 * np.sin(2 * np.pi * 220 * time),
        "close 9:00": 0.2 * np.sin(2 * np.pi * 331 * time + 0.4),
        "wide 9:00": np.clip(noise, -0.9, 0.9),
    }
