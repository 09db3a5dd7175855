"""The build sheet: one page on both papers, hostile names shown as text, nothing fetched."""

import re
import subprocess
from html.parser import HTMLParser

import pytest
from sweepset.models.testpoints import MeterPoint
from sweepset.render.commands import main
from sweepset.render.sheet import BuildSheet, SocketLine, sheet_html

HOSTILE = "<script>alert(1)</script>\"'&"


def sheet(stages=4, label="J01"):
    return BuildSheet(
        circuit=HOSTILE,
        sockets=tuple(
            SocketLine(label, "servo_10k 3.01", -2.1, 4.4e-3, 0.1) for _ in range(stages)
        ),
        trimmer="45.0 % of its travel",
        figures=(("travel", "4.1 octaves"),),
        points=(MeterPoint("supply", 9.0, 9.0, 0.2, 0.0, False),),
        meter="10 Mohm",
        hold=("Turn the rate to its slowest.",),
        spares=(HOSTILE,),
        plot_svg=b"<svg xmlns='http://www.w3.org/2000/svg'/>",
        cautions=("Ears: start quietly.",),
    )


class Tags(HTMLParser):
    def __init__(self):
        super().__init__()
        self.found, self.text, self.handlers = [], "", []

    def handle_starttag(self, tag, attrs):
        self.found.append(tag)
        self.handlers += [name for name, _ in attrs if name.startswith("on")]

    def handle_data(self, data):
        self.text += data


def test_hostile_names_are_text():
    page = Tags()
    page.feed(sheet_html(sheet(label=HOSTILE)))
    assert "script" not in page.found
    assert page.handlers == []
    assert page.text.count(HOSTILE) >= 6


def test_policy_allows_nothing_but_its_own_style_and_picture():
    policy = re.search(r'Content-Security-Policy" content="([^"]+)"', sheet_html(sheet())).group(1)
    assert policy.startswith("default-src 'none'; style-src 'sha256-")
    assert policy.endswith("img-src data:")
    assert "unsafe" not in policy


def test_page_fetches_nothing():
    page = sheet_html(sheet())
    assert not re.search(r"""(src|href)=["'](?!data:)""", page)
    assert "url(" not in page


@pytest.mark.browser
@pytest.mark.parametrize("paper", ["A4", "Letter"])
@pytest.mark.parametrize("stages", [2, 8, 12])
def test_prints_on_one_page(tmp_path, paper, stages):
    """Chromium prints the sheet; the PDF's page objects are counted."""
    page = sheet_html(sheet(stages)).replace("@page { margin", f"@page {{ size: {paper}; margin")
    # the policy's hash no longer fits the changed style, which only this test changes
    page = re.sub(r'<meta http-equiv="Content-Security-Policy"[^>]*>', "", page)
    source, target = tmp_path / "sheet.html", tmp_path / "sheet.pdf"
    source.write_text(page)
    subprocess.run(
        [
            "chromium", "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic",
            "--no-first-run", "--disable-background-networking", "--disable-component-update",
            "--disable-sync", f"--user-data-dir={tmp_path / 'profile'}", "--no-pdf-header-footer",
            f"--print-to-pdf={target}", source.as_uri(),
        ],
        check=True, capture_output=True, timeout=120,
    )  # fmt: skip
    data = target.read_bytes()
    assert len(re.findall(rb"/Type\s*/Page[^s]", data)) == 1
    width = float(re.search(rb"/MediaBox\s*\[0 0 ([\d.]+)", data).group(1))
    assert width == pytest.approx({"A4": 595.0, "Letter": 612.0}[paper], abs=1.5)


PARTS = "--set=-2.35V/5.5mA,-2.32V/5.4mA,-2.16V/4.7mA,-2.07V/4.3mA"


def test_command_writes_the_sheet(tmp_path, capsys):
    out = tmp_path / "sheet.html"
    assert main(["sheet", PARTS, "-o", str(out)]) == 0
    page = out.read_text()
    for shown in ("Build sheet: heron", "gate bus, oscillator held", "Cautions", "travel"):
        assert shown in page
    assert capsys.readouterr().out.strip() == str(out)


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        ([PARTS, "-o", "sheet.pdf"], "give a name ending in .html"),
        ([PARTS, "-o", "no/sheet.html"], "the folder no does not exist"),
        ([PARTS, "-o", "s.html", "--spares", "J01"], "--spares: needs the --tray"),
        (["--set=-2.1V/4mA", "-o", "s.html"], "4 stages"),
        ([PARTS, "-o", "s.html", "--meter", "0 ohm"], "--meter"),
    ],
)
def test_wrong_input_is_refused(tmp_path, monkeypatch, capsys, arguments, said):
    monkeypatch.chdir(tmp_path)
    assert main(["sheet", *arguments]) == 2
    captured = capsys.readouterr()
    assert said in captured.err
    assert "Traceback" not in captured.err
    assert list(tmp_path.iterdir()) == []


def test_an_existing_sheet_stays_unless_asked(tmp_path, capsys):
    out = tmp_path / "sheet.html"
    out.write_text("mine")
    assert main(["sheet", PARTS, "-o", str(out)]) == 2
    assert out.read_text() == "mine"
    assert "--overwrite" in capsys.readouterr().err
