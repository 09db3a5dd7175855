"""The listening page as one self-contained HTML file.

Names, labels and files are data: they travel as JSON in which nothing can end the element,
and the script shows them as text. The page's policy lets its own style and its own script
run, by their hashes, and nothing be fetched.
"""

from __future__ import annotations

import base64
import hashlib
import json
import math
from importlib.resources import files
from typing import Any

import numpy as np
import numpy.typing as npt

from ...models.cycle import Cycle
from ..audio import flac_bytes
from .data import PageData, PageTake

SCRIPTS = ("arithmetic.js", "graph.js", "player.js", "draw.js", "trial.js", "page.js")
LANGUAGE = "en"


def listening_page(data: PageData) -> str:
    """Return the page.

    Parameters
    ----------
    data : PageData
        What it shows.

    Raises
    ------
    InputError
        If a take cannot be read.
    """
    style, body = _source("page.css"), _source("page.html")
    script = "(() => {\n'use strict';\n" + "\n".join(_source(name) for name in SCRIPTS) + "})();\n"
    policy = (
        f"default-src 'none'; script-src '{_hash(script)}'; style-src '{_hash(style)}'; "
        "base-uri 'none'; form-action 'none'"
    )
    takes = "\n".join(
        f'<script type="application/octet-stream" id="take-{n}">{_packed(take, data)}</script>'
        for n, take in enumerate(data.takes)
    )
    return f"""<!doctype html>
<html lang="{LANGUAGE}">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="{policy}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>Listening page</title>
<style>{style}</style>
</head>
<body>
{body}
<script type="application/json" id="data">{embedded_json(_record(data))}</script>
{takes}
<script>{script}</script>
</body>
</html>
"""


def _packed(take: PageTake, data: PageData) -> str:
    packed = flac_bytes(take.path, data.start_frame, data.stop_frame, take.gain_db)
    return base64.b64encode(packed).decode()


def embedded_json(record: Any) -> str:
    """Return a record as JSON that can stand in a script element, whatever text it holds."""
    text = json.dumps(record, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    return text.replace("&", "\\u0026").replace("<", "\\u003c").replace(">", "\\u003e")


def _source(name: str) -> str:
    text = (files("sweepset.render.page") / name).read_text(encoding="utf-8")
    if "</script" in text.lower() or "</style" in text.lower():
        raise AssertionError(f"{name} would end its own element")
    return text


def _hash(text: str) -> str:
    return f"sha256-{base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()}"


def _record(data: PageData) -> dict[str, Any]:
    rate = data.facts.sample_rate_hz
    return {
        "title": data.title,
        "about": data.about,
        "notice": data.notice,
        "cautions": list(data.cautions),
        "rate": rate,
        "channels": data.facts.channels,
        "start": data.start_frame / rate,
        "seconds": (data.stop_frame - data.start_frame) / rate,
        "takes": [
            {
                "name": take.name,
                "facts": [list(fact) for fact in take.facts],
                "cycle": None if take.cycle is None else _cycle(take.cycle),
            }
            for take in data.takes
        ],
        "pairs": [
            {
                "first": pair.first,
                "second": pair.second,
                "sentence": pair.sentence,
                "moments": list(pair.moments_s),
            }
            for pair in data.pairs
        ],
    }


def _cycle(cycle: Cycle) -> dict[str, Any]:
    return {
        "period": cycle.period_s,
        "notches": [_numbers(track) for track in cycle.notch_hz.T],
        "breaks": [_numbers(track) for track in cycle.break_hz.T],
        "stopped": ["".join("01"[int(one)] for one in track) for track in cycle.stopped.T],
    }


def _numbers(track: npt.NDArray[np.float64]) -> list[float | None]:
    """Return a track to four digits, None where there is nothing."""
    return [float(f"{value:.4g}") if math.isfinite(value) else None for value in track]
