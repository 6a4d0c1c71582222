"""Solves the unsplit moment matrix in a general modelling layer, for whoever asks: one JSON document a line in, one a line out.

In: a case as in tests/reference/relaxation.py, with a "solver" and a limit of "seconds". Out: "value", "status", "side" of the matrix, "seconds", and whether it
"ended" of itself. Seconds begin once everything is imported, warmed up, and the words of the matrix are known: what counts is what the layer and the solver take.
"""

import json
import sys
import time
import warnings
from math import isnan
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[2] / "reference"))

import relaxation

# The status says it already.
warnings.filterwarnings("ignore", message="Solution may be inaccurate")


def answer(case):
    begun = time.perf_counter()
    value, status, seconds, side = relaxation.solve(case, case["solver"], case["seconds"])
    # SCS calls it inaccurate where its time ran out.
    ended = status.startswith("optimal") and time.perf_counter() - begun < case["seconds"]
    return dict(value=None if isnan(value) else value, status=status, seconds=seconds, side=side, ended=ended)


def main():
    small = relaxation.cases()["two-states-lean-0.1-0.79-on-average"]
    for solver in ("CLARABEL", "SCS"):
        answer(dict(small, solver=solver, seconds=10))
    print(json.dumps("ready"), flush=True)
    for line in sys.stdin:
        try:
            reply = answer(json.loads(line))
        except Exception as error:
            reply = dict(error=str(error))
        print(json.dumps(reply), flush=True)


if __name__ == "__main__":
    main()
