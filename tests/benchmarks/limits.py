"""How near the limits: every promise on detection, error bars and grouping beside what is reached.

Run by hand, with nothing else running on the machine:

    python -m tests.benchmarks.limits [--quick] [--json] [--only PART] [--first-seed 101000]

Scenes are drawn from fixed seeds and go through rendering, FLAC, opening and measuring; matching
and scoring are those of `tests/pipeline/scoring.py`. Other seeds (`--first-seed`) give the same
campaign for tuning, so that the published figures stay those of seeds nothing was tuned on.
"""

from __future__ import annotations

import argparse
import json
import sys
import time
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent))
sys.path.insert(0, str(Path(__file__).parents[1] / "pipeline"))

from limits_decoys import decoys
from limits_errors import astray, sigmas
from limits_groups import groups, sferics
from limits_joint import joint
from limits_run import Options, Part
from limits_separable import separable
from limits_strength import diffuse, strength
from promises import plain

PARTS: dict[str, Callable[[Options], Part]] = {
    "strength": strength,
    "diffuse": diffuse,
    "decoys": decoys,
    "sigmas": sigmas,
    "astray": astray,
    "groups": groups,
    "sferics": sferics,
    "separable": separable,
    "joint": joint,
}


def arguments() -> argparse.Namespace:
    """What the command line says."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawTextHelpFormatter
    )
    parser.add_argument("--quick", action="store_true", help="a tenth of the injections")
    parser.add_argument("--json", action="store_true", help="print one JSON document")
    parser.add_argument("--only", action="append", choices=PARTS, help="a part; may be repeated")
    parser.add_argument("--first-seed", type=int, default=Options.first_seed)
    parser.add_argument("--workers", type=int, default=Options.workers, help="processes")
    parser.add_argument("--recordings", type=Path, help="real audio without whistlers (decoys)")
    parser.add_argument("--out", type=Path, help="write to this file, too")
    return parser.parse_args()


def main() -> int:
    """Run the parts; 0 when every promise is kept."""
    chosen = arguments()
    options = Options(chosen.first_seed, chosen.quick, chosen.workers, chosen.recordings)
    parts: dict[str, Part] = {}
    texts: list[str] = []
    for name in chosen.only or PARTS:
        begin = time.perf_counter()
        parts[name] = PARTS[name](options)
        text = f"{parts[name]}\n({time.perf_counter() - begin:.0f} s)\n"
        texts.append(text)
        if not chosen.json:
            print(text, flush=True)
    whole = document(parts) if chosen.json else "\n".join(texts)
    if chosen.json:
        print(whole)
    if chosen.out:
        chosen.out.write_text(whole + "\n", encoding="utf-8")
    return 0 if all(figure.kept for part in parts.values() for figure in part.figures) else 1


def document(parts: dict[str, Part]) -> str:
    """Return all parts as one JSON document."""
    return json.dumps(
        {
            name: {
                "title": part.title,
                "figures": [plain(figure) for figure in part.figures],
                "tables": [grid.plain() for grid in part.grids],
                "notes": part.notes,
                "oddities": part.oddities,
            }
            for name, part in parts.items()
        },
        allow_nan=False,
        indent=1,
    )


if __name__ == "__main__":
    sys.exit(main())
