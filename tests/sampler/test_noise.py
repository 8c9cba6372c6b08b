"""Normal numbers: the bits are the published ones, the values are normal, and nothing depends on order."""

import numpy as np
import pytest
from scipy import stats

from sampler.noise import chain_key, draw, normals, scramble


@pytest.mark.parametrize(
    ("counter", "key", "words"),
    [
        ((0, 0, 0, 0), (0, 0), (0x6627E8D5, 0xE169C58D, 0xBC57AC4C, 0x9B00DBD8)),
        ((0xFFFFFFFF,) * 4, (0xFFFFFFFF,) * 2, (0x408F276D, 0x41C83B0E, 0xA20BC7C6, 0x6D5451FD)),
        (
            (0x243F6A88, 0x85A308D3, 0x13198A2E, 0x03707344),
            (0xA4093822, 0x299F31D0),
            (0xD16CFE09, 0x94FDCCEB, 0x5001E420, 0x24126EA1),
        ),
    ],
)
def test_bits_match_published_answers(counter, key, words):
    # Known answers of the 4x32 generator with ten rounds, Salmon et al., Proc. SC11, 16 (2011); from memory.
    assert tuple(map(int, scramble(*map(np.uint64, counter + key)))) == words


def test_values_follow_box_and_muller_from_those_bits():
    key, step, n = (np.uint64(17), np.uint64(5)), np.uint64(2**40 + 3), 1000
    drawn = draw(key, step, n)
    for label in (0, 1, 499, 999):
        words = scramble(np.uint64(label), np.uint64(0), np.uint64(3), np.uint64(2**8), *key)
        a, b, c, d = (float(word) for word in words)
        first, second = (np.sqrt(-2 * np.log((word + 0.5) / 2**32)) for word in (a, c))
        expected = [
            first * np.cos(2 * np.pi * b / 2**32),
            first * np.sin(2 * np.pi * b / 2**32),
            second * np.cos(2 * np.pi * d / 2**32),
        ]
        assert drawn[label] == pytest.approx(expected, abs=1e-14)


def test_values_are_standard_normal_and_uncorrelated():
    n = 300_000
    drawn = draw(chain_key(3, 1.0, 0.8, 0), np.uint64(7), n)
    for component in drawn.T:
        # 1e-6: one false alarm in a million draws of the fixed seed
        assert stats.kstest(component, "norm").pvalue > 1e-6
    correlation = np.corrcoef(drawn.T)[np.triu_indices(3, 1)]
    assert np.abs(correlation).max() < 5 / np.sqrt(n)
    assert abs((drawn**4).mean() - 3) < 5 * np.sqrt(96 / drawn.size)
    shifted = draw(chain_key(3, 1.0, 0.8, 0), np.uint64(8), n)
    assert abs(np.mean(drawn * shifted)) < 5 / np.sqrt(drawn.size)


def test_a_value_belongs_to_its_label_whatever_the_order():
    key, step = chain_key(1, 0.9, 0.7, 2), np.uint64(12)
    labels = np.random.default_rng(0).permutation(101)
    out = np.empty((3, 101))
    normals(*key, step, np.uint64(0), labels, out)
    assert np.array_equal(out.T, draw(key, step, 101)[labels])


def test_keys_differ_by_every_value():
    keys = {
        chain_key(seed, temperature, density, repeat)
        for seed in (1, 2)
        for temperature in (1.0, 1.0000000001)
        for density in (0.8, 0.9)
        for repeat in (0, 1)
    }
    assert len(keys) == 16
