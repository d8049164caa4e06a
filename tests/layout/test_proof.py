"""The layout stage on 364 layouts of fourteen kinds that were never looked at while it was made, beside the drawn truth.

Kinds: the ten of the generator, and wide curved channels, ports at a slant, full wraps, mirrored halves. Every seed
here was fixed before its first run. A few of each new kind run with the tests, all of them with the slow ones.
"""

import numpy as np
import pytest

from tests.layout.proof import prove
from tests.layout.synthetic import MODES
from tests.layout.synthetic_more import MORE_MODES, lay

SEEDS = tuple(range(4001, 4027))
LEAST_RIGHT, LEAST_RIGHT_EVERYTHING, LEAST_RIGHT_CUT = 0.97, 0.80, 0.97
BEND_MEDIAN = 0.9
LEAST_BRANCHES = 1000


@pytest.mark.parametrize("mode", MORE_MODES)
def test_a_few_of_each_new_kind(mode):
    proofs = [prove(lay(seed, mode)) for seed in (3001, 3002)]
    assert all(proof.right and proof.right_cut for proof in proofs)
    assert not any(proof.loops_lost or proof.over_bound for proof in proofs)


@pytest.mark.slow
def test_364_fresh_layouts():
    proofs = {mode: [prove(lay(seed, mode)) for seed in SEEDS] for mode in MODES + MORE_MODES}
    every = [proof for rows in proofs.values() for proof in rows]
    assert len(every) == 364
    assert np.mean([proof.right for proof in every]) >= LEAST_RIGHT
    assert np.mean([proof.right for proof in proofs["everything"]]) >= LEAST_RIGHT_EVERYTHING
    assert np.mean([proof.right_cut for proof in every]) >= LEAST_RIGHT_CUT
    assert sum(proof.loops_lost for proof in every) == 0
    bends = [bend for proof in every for bend in proof.bends]
    assert len(bends) >= LEAST_BRANCHES
    assert sum(proof.over_bound for proof in every) == 0, "the deviation bound is never broken"
    assert np.median(bends) <= BEND_MEDIAN
