"""``sweepset audition``: one riff, dry and through several sets at several rates."""

from __future__ import annotations

import argparse

from ..written_set import SYNTAX
from . import _settings
from ._page import PAGE_NAME
from ._sets import add_tray_arguments

HELP = "render a riff dry and through several sets at several rates, equally loud"
EPILOG = """\
examples:
  sweepset audition riff.wav --tray tray.csv --set close=J07,J12,J31,J40 \\
      --set wide=J02,J15,J33,J58 --rate 9:00 --rate noon --rate 3:00 -o listen
  sweepset audition riff.wav --tray tray.csv --set J07,J12,J31,J40 -o listen

All takes start at the same oscillator phase, are brought to one loudness (ITU-R
BS.1770) and lowered together if one would clip. With --trim auto each set's trimmer is
solved at the middle one of the rates and stays there for the others. Open listen.html in a
browser: it plays the takes in step, shows what their notches do, and holds a blind trial.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    parser.add_argument("riff", help="the riff: WAV, FLAC or another usual audio file")
    parser.add_argument(
        "-o", "--out", metavar="FOLDER", required=True, help="the folder the takes go into"
    )
    _settings.add_circuit_argument(parser)
    parser.add_argument(
        "--set",
        metavar="NAME=PARTS",
        required=True,
        dest="parts",
        action="append",
        help=f"a set, with or without a name; may be given several times; {SYNTAX}",
    )
    add_tray_arguments(parser)
    parser.add_argument(
        "--rate",
        action="append",
        help="rate: 9:00, noon, 35%% or 0.8Hz; may be given several times (default: noon)",
    )
    parser.add_argument(
        "--trim",
        action="append",
        help="bias trimmer: auto (solved for each set), 45%%, or the wiper above ground, 2.31V; "
        "may be given several times (default: auto)",
    )
    _settings.add_celsius_argument(parser)
    _settings.add_take_arguments(parser)
    pages = parser.add_mutually_exclusive_group()
    pages.add_argument(
        "--page",
        metavar="NAME",
        default=PAGE_NAME,
        help=f"name of the listening page in that folder (default: {PAGE_NAME})",
    )
    pages.add_argument("--no-page", action="store_true", help="do not write the listening page")
    parser.add_argument(
        "--no-joined",
        action="store_true",
        help="do not write joined.wav, in which the first two sets take turns",
    )
    parser.add_argument(
        "--pictures",
        choices=("png", "svg", "none"),
        default="png",
        help="format of the pictures beside the takes (default: png)",
    )
    parser.add_argument(
        "--excerpt",
        metavar="FROM:TO",
        help="seconds of the riff that the page holds (default: all of it, where it fits)",
    )
    _settings.add_json_argument(parser)


def run(args: argparse.Namespace) -> int:
    """Render the audition and say what was written."""
    from pathlib import Path

    from ...models.circuit import load_circuit
    from ...models.quantity import parse_rate, parse_trim
    from ..audition import audition_takes, render_audition
    from ..setup import TakeSettings
    from ._beside import Beside
    from ._page import page_name
    from ._screen import print_json, print_table, progress, say, warn
    from ._sets import named_sets, read_sets

    circuit = load_circuit(args.circuit)
    names, written = named_sets(args.parts)
    sets = dict(zip(names, read_sets(written, args, circuit), strict=True))
    rates = [
        _settings.setting(parse_rate, text, "--rate")
        for text in dict.fromkeys(args.rate or ["noon"])
    ]
    trimmers = [
        _settings.setting(parse_trim, text, "--trim")
        for text in dict.fromkeys(args.trim or ["auto"])
    ]
    base = TakeSettings(
        circuit=circuit,
        jfets=next(iter(sets.values())),
        trimmer=trimmers[0],
        rate=rates[0],
        celsius=_settings.quantity(args.celsius, "C", "--celsius"),
        full_scale_v=_settings.quantity(args.full_scale, "V", "--full-scale"),
    )
    takes = audition_takes(base, sets, rates, trimmers)
    beside = Beside(
        folder=Path(args.out),
        riff=Path(args.riff),
        page_name=None if args.no_page else page_name(args.page),
        excerpt_s=_excerpt(args),
        pictures=args.pictures,
        joined=not args.no_joined,
    )
    beside.check(takes, overwrite=args.overwrite)
    with progress() as tell:
        made = render_audition(
            args.riff,
            args.out,
            takes,
            encoding="float32" if args.float else "pcm24",
            overwrite=args.overwrite,
            progress=tell,
        )
        pairs, written, notice = beside.write(made, tell)
    warn([text for take in made.takes for text in take.warnings])
    if args.json:
        print_json(
            {"folder": args.out, "beside": written, "pairs": [pair.as_record() for pair in pairs]}
            | made.as_record()
        )
        return 0
    rows = []
    for name, take, setup in zip(made.names, made.takes, made.setups, strict=True):
        bus = None if setup is None else setup.bus
        rows.append(
            (
                take.path.name,
                name,
                "" if bus is None else f"{bus.rate_hz:.3g} Hz",
                "" if bus is None else f"{100.0 * bus.trimmer:.1f} %",
                f"{take.lufs:.2f}",
                f"{take.peak_dbfs:.1f}",
            )
        )
    columns = ("file", "take", "rate", "trimmer", "LUFS", "peak dBFS")
    print_table("", columns, rows)
    say(f"full scale is {base.full_scale_v:g} V; the takes are in {args.out}")
    for pair in pairs:
        say(f"{pair.names[0]} against {pair.names[1]}: {pair.sentence}")
        if pair.difference.moments_s:
            say(f"  listen at {', '.join(f'{at:.1f} s' for at in pair.difference.moments_s)}")
    for text in written:
        say(f"  {text}")
    if beside.page_name is not None:
        page = beside.folder / beside.page_name
        say(f"open {page} in a browser ({page.stat().st_size / 1e6:.1f} MB). {notice}".rstrip())
    return 0


def _excerpt(args: argparse.Namespace) -> tuple[float, float] | None:
    from ...models.errors import InputError

    if args.excerpt is None:
        return None
    if args.no_page:
        raise InputError("--excerpt is the listening page's; leave it or --no-page out")
    return _settings.span(args.excerpt, "s", "--excerpt", (0.0, 86_400.0))
