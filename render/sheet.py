"""The build sheet: one printable page that goes to the bench with the parts."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

from ..models.testpoints import MeterPoint

STYLE = """
@page { margin: 11mm; }
* { box-sizing: border-box; }
body { font: 9pt/1.28 "Liberation Sans", Arial, Helvetica, sans-serif; color: #111;
  background: #fff; max-width: 190mm; margin: 0 auto; padding: 4mm; }
@media print { body { padding: 0; max-width: none; } }
h1 { font-size: 17pt; margin: 0 0 1mm; }
h2 { font-size: 10.5pt; margin: 3.2mm 0 1mm; border-bottom: 0.4mm solid #111; }
p { margin: 0.8mm 0; }
table { border-collapse: collapse; width: 100%; }
th, td { border: 0.2mm solid #777; padding: 0.45mm 1.6mm; text-align: left; vertical-align: top; }
th { background: #eee; font-weight: 600; }
td.n, th.n { text-align: right; font-variant-numeric: tabular-nums; white-space: nowrap; }
td.box { width: 7mm; }
td.part { font-weight: 700; font-size: 10.5pt; overflow-wrap: anywhere; }
.two { display: grid; grid-template-columns: 2fr 3fr; gap: 5mm; }
img { width: 100%; max-height: 64mm; object-fit: contain; display: block; }
img.low { max-height: 44mm; }
img.lower { max-height: 32mm; }
ul { margin: 0.8mm 0; padding-left: 5mm; font-size: 8.4pt; }
.blank { border-bottom: 0.2mm solid #111; display: inline-block; min-width: 32mm; }
.small { font-size: 8.4pt; overflow-wrap: anywhere; }
"""


@dataclass(frozen=True)
class SocketLine:
    """One part and where it goes.

    Parameters
    ----------
    label, readings : str
        The part, and what its meter readings were.
    cutoff_v, idss_a : float
        Its parameters [V], [A].
    stall : float
        Share of the cycle in which this stage has stopped.
    """

    label: str
    readings: str
    cutoff_v: float
    idss_a: float
    stall: float


@dataclass(frozen=True)
class BuildSheet:
    """What stands on the sheet.

    Parameters
    ----------
    circuit : str
        Its name.
    sockets : tuple of SocketLine
        In stage order.
    trimmer : str
        The trimmer's position in words.
    figures : tuple of (str, str)
        Name and value: travel, stagger and the like.
    points : tuple of MeterPoint
        Lowest impedance first.
    meter : str
        The meter the points are shown for.
    hold : tuple of str
        How to hold the oscillator.
    spares : tuple of str
        Parts left over.
    plot_svg : bytes
        The cycle's picture.
    cautions : tuple of str
    """

    circuit: str
    sockets: tuple[SocketLine, ...]
    trimmer: str
    figures: tuple[tuple[str, str], ...]
    points: tuple[MeterPoint, ...]
    meter: str
    hold: tuple[str, ...]
    spares: tuple[str, ...]
    plot_svg: bytes
    cautions: tuple[str, ...]


def sheet_html(sheet: BuildSheet) -> str:
    """Return the sheet as one self-contained page without any script.

    Labels and names are data: they are escaped, and the page's policy allows nothing but
    its own style and its own picture.
    """
    style_hash = base64.b64encode(hashlib.sha256(STYLE.encode()).digest()).decode()
    policy = f"default-src 'none'; style-src 'sha256-{style_hash}'; img-src data:"
    picture = base64.b64encode(sheet.plot_svg).decode()
    spares = ", ".join(sheet.spares) if sheet.spares else "none named"
    return f"""<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="{policy}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>Build sheet: {escape(sheet.circuit)}</title>
<style>{STYLE}</style>
</head>
<body>
<h1>Build sheet: {escape(sheet.circuit)}</h1>
<p>Unit <span class="blank">&nbsp;</span> &nbsp; Date <span class="blank">&nbsp;</span>
&nbsp; Built by <span class="blank">&nbsp;</span></p>
<h2>Sockets</h2>
<table>
<tr><th>stage</th><th>part</th><th class="n">cut-off</th><th class="n">Idss</th>
<th>readings</th><th class="n">stall</th><th>in</th></tr>
{_socket_rows(sheet.sockets)}
</table>
<div class="two">
<div>
<h2>Bias trimmer</h2>
<p><b>{escape(sheet.trimmer)}</b></p>
{_figure_table(sheet.figures)}
</div>
<div>
<h2>Measure to ground, in this order</h2>
<table>
<tr><th>point</th><th class="n">true</th><th class="n">{escape(sheet.meter)} meter shows</th></tr>
{_point_rows(sheet.points)}
</table>
</div>
</div>
{"".join(f'<p class="small">{escape(sentence)}</p>' for sentence in sheet.hold)}
<h2>Predicted sweep: notches and the stages' break frequencies over one cycle</h2>
<img class="{_picture_class(len(sheet.sockets))}"
 alt="Notch tracks and break frequencies of each stage over one cycle of the oscillator"
 src="data:image/svg+xml;base64,{picture}">
<p class="small"><b>Spares:</b> {escape(spares)}</p>
<h2>Cautions</h2>
<ul>
{"".join(f"<li>{escape(caution)}</li>" for caution in sheet.cautions)}
</ul>
</body>
</html>
"""


def _picture_class(stages: int) -> str:
    """Return how low the picture must be for all stages to stay on one page."""
    return "lower" if stages > 10 else "low" if stages > 6 else "full"


def _socket_rows(sockets: Sequence[SocketLine]) -> str:
    return "\n".join(
        f'<tr><td>{stage}</td><td class="part">{escape(line.label)}</td>'
        f'<td class="n">{line.cutoff_v:.3f} V</td><td class="n">{1e3 * line.idss_a:.2f} mA</td>'
        f'<td class="small">{escape(line.readings)}</td>'
        f'<td class="n">{100 * line.stall:.0f} %</td><td class="box"></td></tr>'
        for stage, line in enumerate(sockets, start=1)
    )


def _figure_table(figures: Sequence[tuple[str, str]]) -> str:
    rows = "\n".join(
        f'<tr><td>{escape(name)}</td><td class="n">{escape(value)}</td></tr>'
        for name, value in figures
    )
    return f"<table>\n{rows}\n</table>"


def _point_rows(points: Sequence[MeterPoint]) -> str:
    return "\n".join(
        f"<tr><td>{escape(point.name)}{' (moves)' if point.moves else ''}</td>"
        f'<td class="n">{point.true_v:.2f} &plusmn; {point.spread_v:.2f} V</td>'
        f'<td class="n">{point.shown_v:.2f} V</td></tr>'
        for point in points
    )
