"""A worker of the learning benchmark: one contest as JSON on standard input, its scores as one JSON line on output."""

from __future__ import annotations

import json
import sys

from nearhand.service.errors import NearhandError
from nearhand.service.learn.comparison.contest import Contest, hold


def main() -> int:
    """Hold the contest; exit status 1 with words on standard error if it cannot be held."""
    try:
        found = hold(Contest.model_validate_json(sys.stdin.read()))
    except NearhandError as error:
        print(error, file=sys.stderr)
        return 1
    content = {
        "scores": found.scores, "cost_ratios": found.cost_ratios, "gain_errors": found.gain_errors,
        "steps": found.steps, "wall_s": found.wall_s, "curves": found.curves, "chosen": found.chosen,
        "arrivals": found.arrivals(),
    }  # fmt: skip
    print(json.dumps(content))
    return 0


if __name__ == "__main__":
    sys.exit(main())
