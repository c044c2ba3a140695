"""Write artifactlens/site_positions.tsv from mne's template of the 10-05 system.

The template gives a place on the Colin27 head to every name of the 10-05 system (Oostenveld
& Praamstra 2001, Clin Neurophysiol 112:713, from memory). We keep its axes, move the origin
to the centre of the sphere fitted to its scalp electrodes, and add Nz, which the template
holds as the nasion landmark. Run: ``python scripts/make_site_positions.py``.
"""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

TEMPLATES = ("colin27_1005", "standard_1005")
"""One montage under its newer and its older mne name."""

OLD_NAMES = ("T3", "T4", "T5", "T6")
"""Second names of T7, T8, P7, P8, which the template repeats."""

NOT_ON_THE_SCALP = ("A1", "A2", "M1", "M2", "Nz")
"""Named electrodes that take no part in the sphere fit."""

TABLE = Path(__file__).resolve().parent.parent / "artifactlens" / "site_positions.tsv"


def template_positions() -> dict[str, NDArray[np.float64]]:
    """Positions of all named electrodes in the template's own frame, metres.

    Raises
    ------
    LookupError
        If this mne carries the template under none of its names.
    """
    import mne

    for name in TEMPLATES:
        try:
            montage = mne.channels.make_standard_montage(name)
        except ValueError:
            continue
        held = montage.get_positions()
        electrodes = {**held["ch_pos"], "Nz": held["nasion"]}
        return {site: xyz for site, xyz in electrodes.items() if site not in OLD_NAMES}
    raise LookupError(
        f"mne {mne.__version__} has none of the montages {', '.join(TEMPLATES)}"
    )


def sphere_centre(points: NDArray[np.float64]) -> NDArray[np.float64]:
    """Centre of the sphere fitted to ``points`` (n, 3).

    Least squares of ``|p|^2 = 2 c . p + (r^2 - |c|^2)``, which is linear in the unknowns.
    """
    terms = np.column_stack([2 * points, np.ones(len(points))])
    solution = np.linalg.lstsq(terms, (points**2).sum(axis=1), rcond=None)[0]
    return np.asarray(solution[:3])


def table_text() -> str:
    """The table as it is shipped: tab-separated, metres with four decimals (0.1 mm)."""
    positions = template_positions()
    scalp = np.array(
        [xyz for site, xyz in positions.items() if site not in NOT_ON_THE_SCALP]
    )
    centre = sphere_centre(scalp)
    lines = ["name\tx\ty\tz"]
    for site, xyz in positions.items():
        # Adding 0.0 turns a rounded -0.0 into 0.0.
        lines.append(
            "\t".join(
                [site, *(f"{value + 0.0:.4f}" for value in np.round(xyz - centre, 4))]
            )
        )
    return "\n".join(lines) + "\n"


def main() -> None:
    """Write the table, or only compare it with what the template gives."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument(
        "--check", action="store_true", help="compare only; exit 1 if different"
    )
    if parser.parse_args().check:
        same = TABLE.read_text(encoding="utf-8") == table_text()
        print(f"{TABLE.name}: {'as the template gives it' if same else 'differs'}")
        raise SystemExit(0 if same else 1)
    TABLE.write_text(table_text(), encoding="utf-8", newline="\n")
    print(f"{TABLE.name}: {len(table_text().splitlines()) - 1} sites")


if __name__ == "__main__":
    main()
