"""Which points stand out, and how many of them noise alone would."""

from __future__ import annotations

import numpy as np

from xrfid.batch.discover import Judgement, sampled_blocks
from xrfid.batch.engine import GOOD, UNREADABLE


def judged(n: int = 100_000) -> Judgement:
    rng = np.random.default_rng(0)
    excess = np.max(rng.normal(size=(n, 20)), axis=1).astype(np.float32)
    chi2 = (rng.chisquare(100, n) / 100).astype(np.float32)
    return Judgement(chi2, excess, np.full(n, 6.4, np.float32), np.zeros(n, np.uint8), 20)


def test_noise_alone_stands_out_nowhere() -> None:
    assert judged().deviating().size == 0
    assert judged().badly_fitted().size == 0


def test_the_largest_excess_comes_first() -> None:
    made = judged()
    made.excess[[5, 77, 900]] = 9.0, 12.0, 7.0
    assert list(made.deviating()) == [77, 5, 900]
    made.status[77] = UNREADABLE
    assert list(made.deviating()) == [5, 900]
    assert GOOD == 0


def test_a_large_chi_square_counts_as_a_bad_fit() -> None:
    made = judged()
    made.chi2[[3, 4]] = 4.0, 9.0
    assert list(made.badly_fitted()) == [4, 3]


def test_nothing_good_nothing_bad() -> None:
    made = judged(10)
    made.status[:] = UNREADABLE
    assert made.badly_fitted().size == made.deviating().size == 0


def test_the_sample_spreads_over_a_long_run_and_takes_all_of_a_short_one() -> None:
    class Long:
        points_per_block, n_blocks = 1024, 1000

    class Short:
        points_per_block, n_blocks = 1024, 30

    blocks = sampled_blocks(Long())  # type: ignore[arg-type]
    assert blocks[0] == 0
    assert blocks[-1] == 999
    assert blocks.size == 20
    assert sampled_blocks(Short()).size == 30  # type: ignore[arg-type]
