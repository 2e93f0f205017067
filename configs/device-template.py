#!/usr/bin/env python3
"""A backend of your own for Patchwalk: fill in ``answer`` and leave the rest.

Try it as it stands:

    patchwalk backends --check 'external,command="python3 configs/device-template.py"'
    patchwalk solve configs/quillmere.toml --subsolver 'external,command="python3 configs/device-template.py"'

It needs Python and nothing else. Standard output belongs to the protocol (one JSON object a line, described in
DEVELOPERS.md); print whatever you want to say to standard error, which is kept in a log.
"""

import json
import math
import random
import sys

HELLO = {
    "protocol": 1,
    "name": "template",
    "largest_cluster": 64,  # spins in a cluster
    "largest_batch": 64,  # clusters in one line
    "deterministic": True,  # the same line twice gets the same answer twice
    # Where the device takes a limited range or precision, say so, and clusters arrive scaled and rounded to fit:
    # "coupling_range": 1.0, "field_range": 4.0, "precision_bits": 8,
    # About how many seconds one cluster takes, so that a Ctrl-C does not have to wait for many of them:
    "call_s": 0.001,
}


def answer(fields, couplings, spins, temperature, seed, shots):
    """``shots`` configurations of one cluster, each a list of +1 and -1: this is the function to fill.

    The energy, to be low, is sum_i fields[i] s_i + sum over (i, j, J) in couplings of J s_i s_j, with i < j. ``spins``
    is the present configuration, ``temperature`` the outer search's (0 allowed), in units of the energy. Draw random
    numbers from ``seed`` alone if the hello says deterministic.

    In place of a device: simulated annealing, single flips, from the present configuration.
    """
    del temperature  # this one cools on a schedule of its own
    chance = random.Random(seed)
    neighbours = [[] for _ in fields]
    for i, j, coupling in couplings:
        neighbours[i].append((j, coupling))
        neighbours[j].append((i, coupling))
    reach = [sum(abs(coupling) for _, coupling in near) for near in neighbours]
    strength = max(abs(field) + coupled for field, coupled in zip(fields, reach, strict=True))
    results = []
    for _ in range(shots):
        state = list(spins)
        for step in range(20):
            heat = strength * 0.5 * 0.8**step
            for i, field in enumerate(fields):
                rise = -2 * state[i] * (field + sum(coupling * state[j] for j, coupling in neighbours[i]))
                if rise <= 0 or chance.random() < math.exp(-rise / heat):
                    state[i] = -state[i]
        results.append(state)
    return results


def main():
    say(HELLO)
    for line in sys.stdin:  # ends when Patchwalk closes the stream
        asked = json.loads(line)
        reply = {"answer": asked["request"], "spins": []}
        columns = [asked[name] for name in ("fields", "couplings", "spins", "temperature", "seeds")]
        for fields, couplings, spins, temperature, seed in zip(*columns, strict=True):
            reply["spins"].append(answer(fields, couplings, spins, temperature, int(seed), asked["shots"]))
        # A device that knows its own times adds them, in seconds, one number a cluster:
        # reply["load_s"] = [...]; reply["evolve_s"] = [...]; reply["read_s"] = [...]; reply["wait_s"] = [...]
        say(reply)


def say(message):
    print(json.dumps(message), flush=True)


if __name__ == "__main__":
    main()
