"""Run the benchmarks and print their table; ``--json FILE`` stores the rows."""

from __future__ import annotations

import argparse
import json
import platform
from pathlib import Path

from . import engine_speed, ngspice_cost, rule_cost


def main() -> None:
    """Run and print."""
    parser = argparse.ArgumentParser(prog="python -m benchmarks", description=__doc__)
    parser.add_argument("--json", type=Path, help="store the rows here")
    options = parser.parse_args()
    rows = []
    for bench in (
        engine_speed.bare_chain,
        engine_speed.one_take,
        engine_speed.many_takes,
        rule_cost.error_against_cost,
        rule_cost.cost_against_size,
        ngspice_cost.against_ngspice,
    ):
        for entry in bench():
            rows.append(entry)
            print(
                f"{entry['what']:58} {entry['law']:14} {entry['value']:>10g} {entry['unit']}",
                flush=True,
            )
    if options.json:
        facts = {"machine": platform.machine(), "python": platform.python_version()}
        options.json.write_text(json.dumps({"facts": facts, "rows": rows}, indent=1) + "\n")


if __name__ == "__main__":
    main()
