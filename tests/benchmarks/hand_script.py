"""The yardstick: what a careful engineer writes for one board on one afternoon, with pandas and numpy.

Reads the whole file, takes the frames from the clock's pauses, checks every CRC, counts A/B by a table of 16
transitions, and looks at the count from index to index. It knows this one board and this one layout, explains
nothing, measures no time, and holds everything in memory. All frames and all edges are worked on at once, by numpy:
it is as fast as such a script gets without a compiler.

    python hand_script.py CAPTURE.csv        prints what it found as JSON
"""

import json
import sys

import numpy as np
import pandas as pd

CLOCKS = 32  # latch, acknowledge, start, CDS, 27 bits, stop
PAUSE_S = 5e-6  # longer than this between two rising edges: a new frame
POSITION, FLAGS, CRC = 19, 2, 6
POLYNOMIAL = 0x43

# By the state before (A and B as two bits) times four, and the state after: up one, down one, 0 or a jump of two.
STEP = np.array([0, -1, 1, 2, 1, 0, 2, -1, -1, 2, 0, 1, 2, 1, -1, 0])
ILLEGAL = 2


def frames(time, clock, data):
    """(words, ok): the bits of each whole frame, and whether its CRC holds."""
    rising = np.flatnonzero((clock[1:] == 1) & (clock[:-1] == 0)) + 1
    first = np.concatenate([[0], np.flatnonzero(np.diff(time[rising]) > PAUSE_S) + 1])
    length = np.diff(np.append(first, rising.size))
    whole = first[length == CLOCKS]
    # The data line changes after the rising edge that drives it, so at an edge it still holds the bit before.
    bits = data[rising[whole[:, None] + np.arange(CLOCKS)]]
    started = (bits[:, 1] == 1) & (bits[:, 2] == 0) & (bits[:, 3] == 1)
    word = bits[started, 5 : 5 + POSITION + FLAGS + CRC].astype(np.int64)
    register = np.zeros(len(word), np.int64)
    for column in word[:, : POSITION + FLAGS].T:
        out = (register >> (CRC - 1)) ^ column
        register = ((register << 1) & (2**CRC - 1)) ^ (out * (POLYNOMIAL & (2**CRC - 1)))
    sent = word[:, POSITION + FLAGS :] @ (1 << np.arange(CRC - 1, -1, -1))
    return word, (register ^ (2**CRC - 1)) == sent


def quadrature(a, b):
    """(rows, count, illegal): the rows in which A or B changes, the count after each, and how many jump by two."""
    state = a * 2 + b
    change = np.flatnonzero(np.diff(state)) + 1
    step = STEP[state[change - 1] * 4 + state[change]]
    illegal = step == ILLEGAL
    return change, np.cumsum(np.where(illegal, 0, step)), int(illegal.sum())


def main(path):
    table = pd.read_csv(path)
    time = table["Time [s]"].to_numpy()
    clock, data, a, b, index = (table[name].to_numpy() for name in ("MA", "SLO", "A", "B", "Z"))
    word, ok = frames(time, clock, data)
    position = word[:, :POSITION] @ (1 << np.arange(POSITION - 1, -1, -1))
    rows, count, illegal = quadrature(a, b)
    pulses = np.flatnonzero(np.diff(index) == 1) + 1
    at_index = count[np.searchsorted(rows, pulses, side="right") - 1]
    per_turn = np.diff(at_index)
    found = {
        "frames": len(word),
        "good": int(ok.sum()),
        "position_min": int(position.min()),
        "position_max": int(position.max()),
        "edges": len(rows),
        "net_counts": int(count[-1]),
        "illegal": illegal,
        "index_pulses": len(pulses),
        "counts_per_turn": int(np.median(per_turn)),
        "turns_with_other_counts": int((per_turn != np.median(per_turn)).sum()),
    }
    print(json.dumps(found))


if __name__ == "__main__":
    main(sys.argv[1])
