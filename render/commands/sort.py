"""``sweepset sort``: sets from a tray, their stages and the spares."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING, Any

from ...models.errors import InputError
from . import _settings
from ._sets import add_tray_arguments, read_tray

if TYPE_CHECKING:
    from ...models.choosing import Choice, SetFigures
    from ...models.circuit import Circuit
    from ...models.estimate import TrayEstimate
    from ...models.quantity import Setting
    from ...models.tray import Tray

HELP = "choose sets from a tray for a circuit: the best, as many as there are, or a completion"
EPILOG = """\
examples:
  sweepset sort --tray tray.csv
  sweepset sort --tray tray.csv --circuit my_unit.toml --limit 0.1 --csv sets.csv
  sweepset sort --tray tray.csv --fixed 1=J07,2=J12,4=J40
  sweepset sort --tray tray.csv --fixed "1=J07,2=?,4=J40"

The best set has the least expected stagger (octaves between the stages' break
frequencies, over the sweep, at the set's own bias, the readings' doubt counted in) and is
proven best. With --limit, as many disjoint sets within that stagger as can be found, with
the most there can be. With --fixed, the parts that stay, by stage; ? is a soldered part of
which nothing is known. "usual %" is the range of the set's readings over their mean.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Add this command's arguments."""
    parser.epilog = EPILOG
    add_tray_arguments(parser, required=True)
    _settings.add_circuit_argument(parser)
    _settings.add_rate_argument(parser)
    task = parser.add_mutually_exclusive_group()
    task.add_argument(
        "--limit", metavar="OCTAVES", help="as many disjoint sets as have at most this stagger"
    )
    task.add_argument(
        "--fixed", metavar="STAGE=PART,...", help="parts that stay in their stages; ? is an unknown"
    )
    parser.add_argument("--type", default="", metavar="NAME", help="type of the parts given as ?")
    _settings.add_json_argument(parser)
    parser.add_argument("--csv", metavar="FILE", help="also write the sets as a spreadsheet")
    parser.add_argument("--overwrite", action="store_true", help="replace an existing FILE")


def run(args: argparse.Namespace) -> int:
    """Choose and print."""
    from ...models.choosing import with_unknowns
    from ...models.circuit import load_circuit
    from ...models.estimate import estimate_tray
    from ...models.quantity import parse_rate
    from ._choices import COLUMNS, set_row, spreadsheet
    from ._files import new_file, write_new
    from ._screen import print_json, print_table, say, warn

    circuit = load_circuit(args.circuit)
    rate = _settings.setting(parse_rate, args.rate, "--rate")
    tray = read_tray(args)
    limit = _settings.octaves(args.limit, "--limit") if args.limit is not None else None
    fixed = _fixed_stages(args.fixed, circuit, tray) if args.fixed is not None else {}
    if args.type and "?" not in fixed.values():
        raise InputError("--type says what a part given as ? in --fixed is; there is none")
    if args.csv is not None:
        new_file(args.csv, [args.tray, args.fixture, args.circuit], overwrite=args.overwrite)
    unknown = [stage for stage, label in fixed.items() if label == "?"]
    tray = with_unknowns(tray, unknown, args.type)
    fixed = {stage: f"?{stage + 1}" if label == "?" else label for stage, label in fixed.items()}
    estimate = estimate_tray(tray)
    silent = [part.label for part in tray.parts if part.free and not part.readings]
    pool = [label for label in tray.free_labels if label not in {*silent, *fixed.values()}]
    cautions = list(tray.cautions)
    if silent:
        cautions.append(f"left out, for want of a reading: {', '.join(silent)}")
    contradict = [one for one in estimate.reports if one.contradiction and one.label in pool]
    warn([*cautions, *(one.contradiction for one in contradict)])
    if limit is not None:
        record = _many(estimate, circuit, rate, limit, tray, pool)
    else:
        record = _one(estimate, circuit, rate, fixed, tray, pool)
    if args.csv is not None:
        write_new(args.csv, spreadsheet(record["sets"], record.get("spares", [])))
    if args.json:
        print_json(record)
        return 0
    print_table("", COLUMNS, [set_row(one) for one in record["sets"]])
    for line in record["said"]:
        say(line)
    if record.get("spares"):
        rows = [(one["part"], one["reason"]) for one in record["spares"]]
        print_table("left over", ("part", "why"), rows)
    return 0


def _fixed_stages(written: str, circuit: Circuit, tray: Tray) -> dict[int, str]:
    """Return stage (from 0) to label, ``?`` for an unknown; all faults at once."""
    faults: list[str] = []
    found: dict[int, str] = {}
    for word in written.split(","):
        stage, sign, label = (part.strip() for part in word.partition("="))
        if not (sign and label and stage.isascii() and stage.isdigit()):
            faults.append(f"--fixed {word!r}: expected STAGE=PART, for example 2=J12 or 2=?")
        elif not 1 <= int(stage) <= circuit.stage_count:
            faults.append(f"--fixed {word!r}: {circuit.name} has stages 1 to {circuit.stage_count}")
        elif int(stage) - 1 in found:
            faults.append(f"--fixed {word!r}: stage {stage} is given twice")
        else:
            found[int(stage) - 1] = label
    named = [label for label in found.values() if label != "?"]
    try:
        parts = dict(zip(named, tray.chosen(named, allow_used=True), strict=True))
    except InputError as fault:
        raise InputError([*faults, *fault.messages]) from None
    if len(found) == circuit.stage_count:
        faults.append(f"--fixed {written!r}: every stage is taken; nothing is left to choose")
    if faults:
        raise InputError(faults)
    return {stage: "?" if label == "?" else parts[label].label for stage, label in found.items()}


def _one(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    fixed: dict[int, str],
    tray: Tray,
    pool: list[str],
) -> dict[str, Any]:
    """Return the best set or completion, what it stands beside, and what is to be said."""
    from ...models.choosing import best_set, complete_set, poor_set, set_figures
    from ...models.usual import usual_choice, why_they_disagree
    from ._choices import set_record, usual_of, usual_readings

    name, readings = usual_readings(tray, tray.labels)
    if fixed:
        choice = complete_set(estimate, circuit, rate, fixed, labels=pool)
    else:
        choice = best_set(estimate, circuit, rate, labels=pool)
    best = choice.best
    shown: list[tuple[str, SetFigures]] = [("best", best)]
    shown += [(f"next {n}", one) for n, one in enumerate(choice.next_best[:3], start=1)]
    said = [_proof(choice), *_doubt(estimate, circuit, choice)]
    if not best.full_travel:
        said.append(
            f"travel is only {100 * best.travel_share:.0f} % of a uniform set's: no set looked at "
            "reaches 90 %"
        )
    if best.order_matters:
        said.append(
            "in this circuit the order matters: the parts stand in the best order found, by their "
            "notch tracks against those of a uniform set"
        )
    if not fixed:
        usual = usual_choice({label: readings[label] for label in pool if label in readings},
                             circuit.stage_count)  # fmt: skip
        if usual is not None and set(usual) != set(best.labels):
            other = set_figures(estimate, circuit, rate, usual)
            shown.append(("usual rule", other))
            ours, theirs = usual_of(best.labels, readings), usual_of(usual, readings)
            if ours is not None and theirs is not None:
                reason = why_they_disagree(
                    ours, best.expected_stagger_octaves, theirs, other.expected_stagger_octaves
                )
                if reason is not None:
                    said.append(f"best against usual rule ({name}): {reason}")
        rest = [label for label in pool if label not in best.labels]
        if len(rest) >= circuit.stage_count:
            poor = poor_set(estimate, circuit, rate, labels=rest)
            shown.append(("poor, to compare", poor))
    records = [set_record(title, one, usual_of(one.labels, readings)) for title, one in shown]
    search = choice.search
    return {
        "circuit": circuit.name,
        "usual_reading": name,
        "sets": records,
        "proven": choice.proven,
        "bound_octaves": choice.bound_octaves,
        "gap": choice.gap,
        "nodes": search.nodes,
        "combinations": search.combinations,
        "said": said,
    }


def _proof(choice: Choice) -> str:
    """Return how far the best set is proven."""
    search = choice.search
    looked = f"{search.nodes:,} partial sets looked at, of {search.combinations:,} sets there are"
    if choice.proven:
        return (
            f"proven best: the search is closed ({looked}); any other set has an expected stagger "
            f"of {min(choice.bound_octaves, _second(choice)):.4f} octave or more, or less travel"
        )
    why = "the search was stopped" if not search.closed else "the search is closed on its grid"
    return (
        f"best found, not proven: {why} ({looked}); a better set would have an expected stagger "
        f"of at least {choice.bound_octaves:.4f} octave, {100 * choice.gap:.1f} % less"
    )


def _second(choice: Choice) -> float:
    """Return the least expected stagger of the other judged sets of the best one's class."""
    best = choice.best.full_travel
    alike = [one for one in choice.next_best if one.full_travel == best]
    return min((one.expected_stagger_octaves for one in alike), default=float("inf"))


def _doubt(estimate: TrayEstimate, circuit: Circuit, choice: Choice) -> list[str]:
    """Return how probable it is that the best set is better than the next, and what would tell."""
    from ...models.comparing import compare_sets
    from ...models.pairwise import parts_of

    if not choice.next_best:
        return []
    best, other = choice.best, choice.next_best[0]
    found = compare_sets(
        parts_of(estimate), best.labels, best.bias.bus, other.labels, other.bias.bus, circuit
    )
    text = (
        f"best against next 1: better with a probability of {100 * found.probability:.0f} % by "
        f"what the readings tell (Monte Carlo, {found.draws} draws)"
    )
    if found.settling_part is not None:
        text += (
            f"; a further reading of {found.settling_part} would tell most "
            f"({100 * found.settling_share:.0f} % of the doubt)"
        )
    return [text]


def _many(
    estimate: TrayEstimate,
    circuit: Circuit,
    rate: Setting,
    limit: float,
    tray: Tray,
    pool: list[str],
) -> dict[str, Any]:
    """Return the disjoint sets under a limit, the spares, and what is to be said."""
    from ...models.choosing import disjoint_sets
    from ._choices import packed_records, usual_readings

    name, readings = usual_readings(tray, tray.labels)
    found = disjoint_sets(estimate, circuit, rate, limit, labels=pool)
    count = len(found.sets)
    within = "too many to visit" if found.within_limit is None else f"{found.within_limit:,}"
    said = [
        f"{count} disjoint sets within {limit:g} octave; there cannot be more than {found.bound} "
        f"({found.reason}); parts divided by stages would say {found.by_count}",
        f"sets within the limit, overlapping ones counted: {within}",
    ]
    if found.order_matters:
        said.append("in this circuit the order matters: the parts stand in the best order found")
    return {
        "circuit": circuit.name,
        "usual_reading": name,
        "limit_octaves": limit,
        "sets": packed_records(found, readings),
        "count": count,
        "bound": found.bound,
        "bound_by": found.reason,
        "parts_divided_by_stages": found.by_count,
        "trimmer_step": found.position_step,
        "spares": [
            {"part": one.label, "reason": one.reason, "lonely": one.lonely,
             "nearest": list(one.partners), "stagger_octaves": one.stagger_octaves}
            for one in found.leftovers
        ],
        "said": said,
    }  # fmt: skip
