"""Ten robots, five minutes, everything goes wrong: nobody touches, nobody leaves the site."""

from __future__ import annotations

import pytest
from benchmarks.cases import mission

from allocator_node.sim.rehearsal import rehearse

SECONDS = 300.0


@pytest.mark.campaign(slice=1, whole=50)
def test_no_contact(seed):
    team, world = mission(seed, SECONDS)
    rehearsal = rehearse(team, world, SECONDS, seed=seed)
    assert rehearsal.min_separation_m > 0
    assert rehearsal.boundary_violations == 0
    assert rehearsal.body_violations == 0
