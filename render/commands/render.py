"""``sweepset render``: one riff through one set, into one WAV."""

from __future__ import annotations

import argparse

from . import _settings

HELP = "render a riff through a circuit with a set of JFETs into one WAV"
EPILOG = """\
examples:
  sweepset render riff.wav --tray tray.csv --set J07,J12,J31,J40 -o take.wav
  sweepset render riff.wav --circuit my_unit.toml --tray tray.csv --set J07,J12,J31,J40 \\
      --rate 9:00 --trim 2.31V -o take.wav
  sweepset render riff.wav --set=-2.1V/4.2mA,-2.1V/4.3mA,-2.2V/4.3mA,-2.1V/4.2mA -o take.wav

Beside the WAV goes a JSON file that says what the take was made from.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    parser.add_argument("riff", help="the riff: WAV, FLAC or another usual audio file")
    parser.add_argument("-o", "--out", metavar="WAV", required=True, help="the WAV to write")
    _settings.add_set_arguments(parser)
    _settings.add_rate_argument(parser)
    _settings.add_trim_argument(parser)
    _settings.add_celsius_argument(parser)
    parser.add_argument(
        "--gain", default="0", metavar="DB", help="gain after the unit in dB (default: 0)"
    )
    parser.add_argument(
        "--scale-peak",
        action="store_true",
        help="if the peak would clip, lower the whole take until it is at -1 dBFS",
    )
    _settings.add_take_arguments(parser)
    _settings.add_json_argument(parser)


def run(args: argparse.Namespace) -> int:
    """Render the take and say what was written."""
    from ...models.circuit import load_circuit
    from ...models.quantity import parse_rate, parse_trim
    from ..setup import TakeSettings
    from ..take import render_file
    from ._figures import trimmer_text
    from ._screen import print_json, progress, say, warn
    from ._sets import read_set

    circuit = load_circuit(args.circuit)
    settings = TakeSettings(
        circuit=circuit,
        jfets=read_set(_settings.only_set(args), args, circuit),
        trimmer=_settings.setting(parse_trim, args.trim, "--trim"),
        rate=_settings.setting(parse_rate, args.rate, "--rate"),
        celsius=_settings.quantity(args.celsius, "C", "--celsius"),
        full_scale_v=_settings.quantity(args.full_scale, "V", "--full-scale"),
    )
    gain_db = _settings.decibels(args.gain, "--gain")
    with progress() as tell:
        made = render_file(
            args.riff,
            args.out,
            settings,
            encoding="float32" if args.float else "pcm24",
            gain_db=gain_db,
            peak="scale" if args.scale_peak else "refuse",
            overwrite=args.overwrite,
            progress=tell,
        )
    warn(made.warnings)
    if args.json:
        print_json({"file": str(made.path)} | made.record)
        return 0
    take = made.record["take"]
    parts = ", ".join(f"{part['stage']}: {part['label']}" for part in take["parts"])
    say(f"{made.path}")
    say(f"  circuit {circuit.name}, stage: part {parts}")
    say(f"  bias trimmer {trimmer_text(take['trimmer']['position'])}")
    say(f"  rate {take['rate']['rate_hz']:.3g} Hz, {settings.celsius:g} C")
    say(f"  full scale is {settings.full_scale_v:g} V, gain after the unit {made.gain_db:+.1f} dB")
    say(f"  loudness {made.lufs:.1f} LUFS, peak {made.peak_dbfs:.1f} dBFS")
    return 0
