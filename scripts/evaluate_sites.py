"""Show how well the technologist is advised: electrode faults put into real recordings.

    python scripts/evaluate_sites.py --split development
    python scripts/evaluate_sites.py --split check --write

``development`` may be looked at and lists every case that failed; ``check`` is for the
final table, which ``--write`` fills into ``models/SITE_ADVICE.md``. To 200 cases come half
as many in which muscle or eyes are all there is, and the recordings as distributed. Some
minutes on two cores.
"""

from __future__ import annotations

import argparse
import os
import sys
from pathlib import Path

from artifactlens.errors import ArtifactlensError, OptionError
from artifactlens.export.atomic import write_atomically
from artifactlens.training.evaluation.card import fill
from artifactlens.training.sitechecks import table
from artifactlens.training.sitechecks.backgrounds import SPLITS, sources, untouched
from artifactlens.training.sitechecks.runs import (
    fault_orders,
    patient_orders,
    run_cases,
    run_untouched,
)

FEWEST_CASES = 200
EVERY = 1_000_000


def main() -> int:
    """Run the cases, print the tables and, if asked, write them."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    default = os.environ.get("ARTIFACTLENS_CORPORA", "../shared/corpora")
    parser.add_argument("--corpora", type=Path, default=Path(default), help="their folder")
    parser.add_argument("--split", choices=list(SPLITS), default="development")
    parser.add_argument(
        "--cases", type=int, default=FEWEST_CASES, help="faults put in; patients are half"
    )
    parser.add_argument("--jobs", type=int, default=2, help="worker processes")
    parser.add_argument(
        "--list", type=int, metavar="FAILURES",
        help="how many failed cases to list at most (development: every one; check: none)",
    )  # fmt: skip
    parser.add_argument("--write", action="store_true", help="fill the tables into --text")
    parser.add_argument("--text", type=Path, default=Path("models/SITE_ADVICE.md"))
    arguments = parser.parse_args()
    most = arguments.list
    if most is None:
        most = EVERY if arguments.split == "development" else 0
    try:
        check_wishes(arguments.split, arguments.cases, arguments.write)
        found, wrong = evaluate(
            arguments.corpora, arguments.split, arguments.cases, arguments.jobs, most
        )
        print(*found.values(), *wrong, sep="\n")
        if arguments.write:
            write(arguments.text, found)
    except ArtifactlensError as error:
        print(error, file=sys.stderr)
        return 1
    return 0


def check_wishes(split: str, cases: int, write: bool) -> None:
    """Refuse what would make an empty table, or a written one of too little."""
    if cases < 2:
        raise OptionError(
            f"--cases needs 2 or more; given was {cases}.", "Give a number of cases."
        )
    if write and (split != "check" or cases < FEWEST_CASES):
        raise OptionError(
            f"Only a table of {FEWEST_CASES} cases or more of the split check is written; "
            f"given were {cases} of {split}.",
            f"Use --split check --cases {FEWEST_CASES}, or leave out --write.",
        )


def evaluate(
    root: Path, split: str, cases: int, jobs: int, most: int
) -> tuple[dict[str, str], list[str]]:
    """Tables by the name of their block, and at most ``most`` failed cases of each set."""
    beds = sources(root, split)
    faults = run_cases(fault_orders(cases, split), beds, jobs)
    patients = run_cases(patient_orders(cases // 2, split), beds, jobs)
    left = run_untouched(untouched(root, split), jobs)
    put_in = [*faults, *patients]
    found = {
        "site advice aims": table.aims_table(
            table.simulated_aims(put_in),
            f"**SIMULATED faults over real background ({split}). Aims.**",
        ),
        "site advice causes": table.cause_table(put_in, split),
        "site advice faults": table.fault_table(put_in, split),
        "site advice untouched aims": table.aims_table(
            table.untouched_aims(left),
            "**REAL. Recordings as distributed, nothing put in. Aims.**",
        ),
        "site advice untouched": table.untouched_table(left),
    }
    wrong = [*table.failures(put_in, most), *table.untouched_failures(left, most)]
    return found, wrong


def write(path: Path, found: dict[str, str]) -> None:
    """Fill all blocks of the text; nothing is written if one is missing."""
    text = path.read_text(encoding="utf-8")
    for name, content in found.items():
        text = fill(text, name, content)
    write_atomically(path, text)
    print(f"wrote {path}")


if __name__ == "__main__":
    sys.exit(main())
