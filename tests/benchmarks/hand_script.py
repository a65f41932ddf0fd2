"""The yardstick: what a careful engineer writes for one board on one afternoon, with pandas and numpy.

Reads the whole file, takes the frames from the clock's pauses, checks every CRC, counts A/B by a table of 16
transitions, and looks at the count from index to index. It knows this one board and this one layout, explains
nothing, measures no time, and holds everything in memory. Two ways to the words:

    python hand_script.py CAPTURE.csv               a loop over the frames, as most begin
    python hand_script.py CAPTURE.csv --matrix      all frames at once, as fast as it gets without a compiler

Prints what it found as JSON.
"""

import json
import sys

import numpy as np
import pandas as pd

CLOCKS = 32  # latch, acknowledge, start, CDS, 27 bits, stop
PAUSE_S = 5e-6  # longer than this between two rising edges: a new frame
POSITION, FLAGS, CRC = 19, 2, 6
POLYNOMIAL = 0x43
CRC_MASK = 2**CRC - 1

# By the state before (A and B as two bits) times four, and the state after: up one, down one, 0 or a jump of two.
STEP = np.array([0, -1, 1, 2, 1, 0, 2, -1, -1, 2, 0, 1, 2, 1, -1, 0])
ILLEGAL = 2


def bursts(time, clock):
    """(rising, first, length): rows of the clock's rising edges; where among them each frame begins, and how many."""
    rising = np.flatnonzero((clock[1:] == 1) & (clock[:-1] == 0)) + 1
    first = np.concatenate([[0], np.flatnonzero(np.diff(time[rising]) > PAUSE_S) + 1])
    return rising, first, np.diff(np.append(first, rising.size))


# The data line changes after the rising edge that drives it, so at an edge it still holds the bit before.


def frames_one_by_one(time, clock, data):
    """(positions, ok): of each whole frame, and whether its CRC holds."""
    positions, ok = [], []
    rising, first, length = bursts(time, clock)
    at_edges = data[rising]
    for start, count in zip(first, length, strict=True):
        bits = at_edges[start : start + count].tolist()
        if count != CLOCKS or bits[1:4] != [1, 0, 1]:
            continue
        word = bits[5 : 5 + POSITION + FLAGS + CRC]
        register = 0
        for bit in word[: POSITION + FLAGS]:
            out = (register >> (CRC - 1)) ^ bit
            register = (register << 1) & CRC_MASK
            if out:
                register ^= POLYNOMIAL & CRC_MASK
        sent = int("".join(map(str, word[POSITION + FLAGS :])), 2)
        positions.append(int("".join(map(str, word[:POSITION])), 2))
        ok.append(register ^ CRC_MASK == sent)
    return np.array(positions), np.array(ok)


def frames_as_a_matrix(time, clock, data):
    """The same, column by column over all frames."""
    rising, first, length = bursts(time, clock)
    whole = first[length == CLOCKS]
    bits = data[rising[whole[:, None] + np.arange(CLOCKS)]]
    started = (bits[:, 1] == 1) & (bits[:, 2] == 0) & (bits[:, 3] == 1)
    word = bits[started, 5 : 5 + POSITION + FLAGS + CRC]
    register = np.zeros(len(word), np.int64)
    for column in word[:, : POSITION + FLAGS].T:
        out = (register >> (CRC - 1)) ^ column
        register = ((register << 1) & CRC_MASK) ^ (out * (POLYNOMIAL & CRC_MASK))
    sent = word[:, POSITION + FLAGS :] @ (1 << np.arange(CRC - 1, -1, -1))
    return word[:, :POSITION] @ (1 << np.arange(POSITION - 1, -1, -1)), register ^ CRC_MASK == sent


def quadrature(a, b):
    """(rows, count, illegal): the rows in which A or B changes, the count after each, and how many jump by two."""
    state = a * 2 + b
    change = np.flatnonzero(np.diff(state)) + 1
    step = STEP[state[change - 1] * 4 + state[change]]
    illegal = step == ILLEGAL
    return change, np.cumsum(np.where(illegal, 0, step)), int(illegal.sum())


def main(path, frames):
    table = pd.read_csv(path)
    time = table["Time [s]"].to_numpy()
    clock, data, a, b, index = (table[name].to_numpy() for name in ("MA", "SLO", "A", "B", "Z"))
    positions, ok = frames(time, clock, data)
    rows, count, illegal = quadrature(a, b)
    pulses = np.flatnonzero(np.diff(index) == 1) + 1
    at_index = count[np.searchsorted(rows, pulses, side="right") - 1]
    per_turn = np.diff(at_index)
    found = {
        "frames": len(positions),
        "good": int(ok.sum()),
        "position_min": int(positions.min()),
        "position_max": int(positions.max()),
        "edges": len(rows),
        "net_counts": int(count[-1]),
        "illegal": illegal,
        "index_pulses": len(pulses),
        "counts_per_turn": int(np.median(per_turn)),
        "turns_with_other_counts": int((per_turn != np.median(per_turn)).sum()),
    }
    print(json.dumps(found))


if __name__ == "__main__":
    main(sys.argv[1], frames_as_a_matrix if "--matrix" in sys.argv else frames_one_by_one)
