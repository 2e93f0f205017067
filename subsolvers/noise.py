"""What a device does wrong: dephasing, control errors, fields and couplings of few bits, and misread spins.

Each is switched on by itself and drawn from the call's own seed, every kind from a stream of its own, so that one
more kind of noise changes none of the other draws. A subsolver that can be noisy has four parameters:

``dephasing``
    Z jumps per spin and hop (a hop is 1/hopping on the hypercube): d rho/dt = -i [H, rho] + rate * sum_i (Z_i rho Z_i
    - rho), under which the coherence of two configurations at Hamming distance d decays as exp(-2 rate d t). It is
    simulated by quantum trajectories (trajectories.py, anneal_trajectories.py).
``control_error``
    Standard deviation of a Gaussian relative error of every field and coupling, drawn anew for every call.
``precision_bits``
    Every field and coupling is set to the nearest of the 2^bits steps into which the range from minus to plus the
    cluster's largest of them is cut. Control errors come on top: what is rounded is what is asked for.
``readout_flip``
    Probability that a measured spin is read wrong, each by itself.

The hopping rate and the measuring times stay those of the cluster as it was meant, and so do its minima.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Protocol

import numpy as np

from patchwalk.subsolvers.compiled import compiled
from patchwalk.subsolvers.contract import F64, I8, U64, Balance, ClusterBatch, Proposals
from patchwalk.subsolvers.draws import combine, next_gaussian, next_unit
from patchwalk.subsolvers.outcomes import lowest_of
from patchwalk.subsolvers.propagate import level_table
from patchwalk.subsolvers.spectrum import tie_tolerance

CONTROL, READOUT = np.uint64(0xC0), np.uint64(0x5EAD)
"""Words that tell the streams of a call apart."""

MOST_BITS = 53


class Noisy(Protocol):
    """A subsolver with the four parameters."""

    @property
    def name(self) -> str: ...
    @property
    def dephasing(self) -> float: ...
    @property
    def control_error(self) -> float: ...
    @property
    def precision_bits(self) -> int | None: ...
    @property
    def readout_flip(self) -> float: ...


@dataclass(frozen=True)
class Noise:
    """The noise of one subsolver; see the module for units and meaning."""

    dephasing: float = 0.0
    control_error: float = 0.0
    precision_bits: int | None = None
    readout_flip: float = 0.0

    @property
    def off(self) -> bool:
        return not (self.dephasing or self.readout_flip or self.disturbs)

    @property
    def disturbs(self) -> bool:
        """Whether the cluster that acts is not the one asked for."""
        return self.control_error > 0.0 or self.precision_bits is not None

    def balance(self, quiet: Balance) -> Balance:
        """What is left of the promise that the noiseless subsolver makes.

        A disturbance drawn from the seed knows nothing of the incumbent, and a sequence of Z jumps is as likely as
        its reverse, so both leave a symmetric proposal symmetric; a ratio survives as long as the law of the shot is
        computed. Misread spins break either.
        """
        if self.readout_flip > 0.0 or (self.dephasing > 0.0 and quiet == "ratio"):
            return "none"
        return quiet

    def disturbed(self, batch: ClusterBatch) -> ClusterBatch:
        """The clusters that really act, every row's a function of its own seed; the batch itself where none does."""
        if not self.disturbs:
            return batch
        assert batch.couplings is not None
        fields, couplings = np.empty(batch.fields.shape), np.zeros(batch.couplings.shape)
        share = 0.0 if self.precision_bits is None else 2.0 ** (1 - self.precision_bits)
        _disturb(batch.fields, batch.couplings, batch.seeds, share, self.control_error, fields, couplings)
        return replace(batch, fields=fields, couplings=couplings)

    def law_as_read(self, law: F64) -> F64:
        """The law f64 (N,) of what is read, from that of what is there: k 2^k additions."""
        read = law.copy()
        if self.readout_flip > 0.0:
            _mix_bits(read, self.readout_flip)
        return read

    def reported(self, batch: ClusterBatch, seen: Proposals, quiet: Proposals, laws: F64 | None) -> Proposals:
        """The proposals of a noisy call.

        ``seen`` holds what the device would have shown if no spin were misread, ``quiet`` what the noiseless call
        reports; ``laws`` f64 (B, N) are those of one shot before it is read, None where only samples are known.
        """
        outcomes, hit = seen.outcomes, None
        if self.readout_flip > 0.0:
            outcomes = outcomes.copy()
            _misread(outcomes, batch.seeds, self.readout_flip)
        if laws is not None:
            hit = np.array([minimum_share(batch, row, self.law_as_read(law)) for row, law in enumerate(laws)])
        return replace(seen, outcomes=outcomes, hit_probability=hit, noiseless_hit=quiet.hit_probability)


def noise_of(subsolver: Noisy) -> Noise:
    """The noise that a subsolver's parameters ask for.

    Raises ``ValueError`` naming the parameter whose value is out of range.
    """
    _require(subsolver, "dephasing", 0.0, math.inf, "a rate of at least 0, in Z jumps per spin and hop")
    _require(subsolver, "control_error", 0.0, 1.0, "a relative standard deviation from 0 to 1")
    _require(subsolver, "readout_flip", 0.0, 0.5, "a probability from 0 to 0.5, at which nothing is read at all")
    bits = subsolver.precision_bits
    if bits is not None and (not isinstance(bits, int) or isinstance(bits, bool) or not 1 <= bits <= MOST_BITS):
        raise ValueError(
            f"{subsolver.name}: precision_bits is {bits!r}; give a whole number from 1 to {MOST_BITS}, "
            "or leave it out for full precision"
        )
    return Noise(float(subsolver.dephasing), float(subsolver.control_error), bits, float(subsolver.readout_flip))


def _require(subsolver: Noisy, key: str, lowest: float, highest: float, wanted: str) -> None:
    value = getattr(subsolver, key)
    number = isinstance(value, (int, float)) and not isinstance(value, bool) and math.isfinite(value)
    if not number or not lowest <= value <= highest:
        raise ValueError(f"{subsolver.name}: {key} is {value!r}; give {wanted}")


def minimum_share(batch: ClusterBatch, row: int, law: F64) -> float:
    """The probability that a law f64 (2^k,) gives to the minima of the row's cluster, ties among them."""
    assert batch.couplings is not None
    energies = level_table(batch.fields[row], batch.couplings[row])
    ceiling = lowest_of(energies) + tie_tolerance(batch.fields[row], batch.couplings[row])
    return min(1.0, float(law[energies <= ceiling].sum()))


@compiled
def _as_set(weight: float, step: float, error: float, stream: U64) -> float:
    """A field or coupling as the device has it: rounded to whole steps, then off by a relative error."""
    if step > 0.0:
        weight = step * np.rint(weight / step)
    return weight * (1.0 + error * next_gaussian(stream)) if error > 0.0 else weight


@compiled
def _disturb(
    fields: F64, couplings: F64, seeds: U64, share: float, error: float, new_fields: F64, new_couplings: F64
) -> None:
    """Fill fields (B, k) and couplings (B, k, k) as the device has them; a step is ``share`` of the row's largest."""
    stream = np.empty(1, np.uint64)
    rows, size = fields.shape
    for row in range(rows):
        stream[0] = combine(seeds[row], CONTROL)
        largest = 0.0
        for i in range(size):
            largest = max(largest, abs(fields[row, i]))
            for j in range(i):
                largest = max(largest, abs(couplings[row, j, i]))
        for i in range(size):
            new_fields[row, i] = _as_set(fields[row, i], share * largest, error, stream)
            for j in range(i):
                weight = _as_set(couplings[row, j, i], share * largest, error, stream)
                new_couplings[row, i, j] = new_couplings[row, j, i] = weight


@compiled
def _mix_bits(law: F64, flip: float) -> None:
    """law <- C law with C[y, x] = flip^d (1 - flip)^(k - d), d the Hamming distance from x to y: bit by bit."""
    distance = 1
    while distance < len(law):
        for number in range(len(law)):
            if number & distance == 0:
                here, there = law[number], law[number ^ distance]
                law[number] = (1.0 - flip) * here + flip * there
                law[number ^ distance] = flip * here + (1.0 - flip) * there
        distance *= 2


@compiled
def _misread(outcomes: I8, seeds: U64, flip: float) -> None:
    """Turn over each spin of ``outcomes`` (B, m, k) with this probability."""
    stream = np.empty(1, np.uint64)
    rows, shots, size = outcomes.shape
    for row in range(rows):
        stream[0] = combine(seeds[row], READOUT)
        for shot in range(shots):
            for spin in range(size):
                if next_unit(stream) < flip:
                    outcomes[row, shot, spin] = -outcomes[row, shot, spin]
