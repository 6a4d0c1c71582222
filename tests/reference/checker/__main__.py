"""A second implementation of the check, written from the theory: no part of it was taken from the program that makes the records.

    python3 tests/reference/checker FILE...              says of each bundle whether it is believed; exit status 3 if one is not
    python3 tests/reference/checker --mutate N FILE...   N single mutations of the bundles in all, one JSON object a line: the file, what was
                                                         changed, the steps that change it, and the problem that was found (null if none)

With `--eliminate` the multipliers are besides eliminated to see that they are positive semidefinite, which L L^T is anyway.
Python 3.11 or newer, nothing but its standard library.
"""

import argparse
import random
import sys

from figures import compact, read
from mutations import mutations
from record import problem


def main():
    parser = argparse.ArgumentParser(prog="checker", description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("files", nargs="+", metavar="FILE")
    parser.add_argument("--mutate", type=int, metavar="N")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--eliminate", action="store_true")
    options = parser.parse_args()
    documents = []
    for file in options.files:
        with open(file, encoding="utf-8") as stream:
            documents.append((file, read(stream.read())))
    believed = True
    if options.mutate is None:
        for file, document in documents:
            found = problem(document, options.eliminate)
            believed = believed and found is None
            print(f"{file}: {'believed' if found is None else found}")
        return 0 if believed else 3
    source = random.Random(options.seed)
    for i, (file, document) in enumerate(documents):
        share = options.mutate * (i + 1) // len(documents) - options.mutate * i // len(documents)
        for what, steps, mutated in mutations(document, source, share):
            print(compact({"file": file, "what": what, "steps": steps, "problem": problem(mutated)}))
    return 0


sys.exit(main())
