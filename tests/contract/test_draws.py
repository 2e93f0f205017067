"""Streams are what they claim: a published generator, independent per purpose, the same in kernels and out."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import chisquare, kstest

from patchwalk.subsolvers.draws import (
    call_seeds,
    combine,
    generator_for,
    next_below,
    next_unit,
    next_word,
    one_in,
    seed_for,
    stream_for,
)


def test_splitmix64_gives_its_published_numbers() -> None:
    """First outputs of splitmix64 from seed 1234567, as the reference implementation prints them (from memory)."""
    stream = np.array([1234567], np.uint64)
    words = [int(next_word(stream)) for _ in range(5)]
    assert words == [
        6457827717110365317,
        3203168211198807973,
        9817491932198370423,
        4593380528125082431,
        16408922859458223821,
    ]


def test_seeds_are_made_alike_in_kernels_and_out() -> None:
    for seed, word in ((0, 0), (7, 123), (2**63 + 5, 2**40)):
        assert seed_for(seed, word) == int(combine(np.uint64(seed), np.uint64(word)))
    assert seed_for(1, 2, 3) == int(combine(np.uint64(seed_for(1, 2)), np.uint64(3)))
    assert len({seed_for(a, b, c) for a in range(10) for b in range(10) for c in range(10)}) == 1000


def test_call_seeds_differ_and_fit_a_signed_integer() -> None:
    seeds = call_seeds(np.uint64(99), 10_000)
    assert len(set(seeds.tolist())) == 10_000
    assert int(seeds.max()) < 2**63
    assert call_seeds(np.uint64(99), 3, 7).tolist() == seeds[7:10].tolist(), "told by the number of the call alone"


def test_units_are_uniform_and_whole_numbers_even() -> None:
    """Kolmogorov-Smirnov and chi-square with a fixed seed; p below 1e-4 would be a false alarm once in ten thousand."""
    stream = stream_for(5, 1)
    units = np.array([next_unit(stream) for _ in range(20_000)])
    assert units.min() >= 0.0
    assert units.max() < 1.0
    assert kstest(units, "uniform").pvalue > 1e-4
    counts = np.bincount([next_below(stream, 7) for _ in range(20_000)], minlength=7)
    assert len(counts) == 7
    assert chisquare(counts).pvalue > 1e-4


def test_one_in_picks_its_share() -> None:
    seeds = call_seeds(np.uint64(3), 64_000)
    picked = one_in(64, seeds, 8)
    assert picked.tolist() == [seed_for(int(seed), 8) % 64 == 0 for seed in seeds]
    assert picked.sum() == pytest.approx(1000, abs=5 * np.sqrt(1000))
    assert not np.array_equal(picked, one_in(64, seeds, 9))


def test_generators_are_seeded() -> None:
    assert generator_for(3, 1).random() == generator_for(3, 1).random() != generator_for(3, 2).random()
