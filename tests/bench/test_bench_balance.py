"""Balance of a sample: better than before, no random draw better, nothing slow that its range does not hold."""

import pytest

from morph.core.threads import single_thread
from tests.bench.balance_table import jobs, measure

pytestmark = pytest.mark.slow


@pytest.mark.parametrize("name", ["tealight-cup", "lantern-sleeve", "tray-insert"])
def test_a_balance_is_beaten_by_no_draw_and_leaves_no_free_branch_slow(name):
    with single_thread():
        row = measure(jobs()[name], 300)
    assert row.aim_after < row.aim_before and row.after[0] < row.before[0]
    assert row.better_draws == 0 and row.best_draw > row.aim_after
    assert not row.free_slow
    assert row.printed_spread[1] < row.before[0]
