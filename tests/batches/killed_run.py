"""A run that a test kills: python killed_run.py STORE."""

import sys

import evidence as ev
from tests.batches import batch_problems as problems

DATA_SETS, PART_SIZE = 2400, 40


def main(store):
    return ev.weigh_many(
        problems.both(),
        problems.stacked(DATA_SETS),
        shared={"t": problems.TIMES},
        store=store,
        part_size=PART_SIZE,
    )


if __name__ == "__main__":
    main(sys.argv[1])
