"""Points before a gap count by as much less as the reference may have drifted while nobody read it."""

from __future__ import annotations

import pytest

from controller.titration.gaps import drift_over_gaps_mv


def test_only_gaps_after_a_point_count():
    gaps = [(100.0, 60.0), (300.0, 120.0)]
    # by hand: 0.1 mV/min over 1 + 2, over 2, and over no minutes
    assert drift_over_gaps_mv(30.0, gaps) == pytest.approx(0.3)
    assert drift_over_gaps_mv(200.0, gaps) == pytest.approx(0.2)
    assert drift_over_gaps_mv(310.0, gaps) == 0.0
    assert drift_over_gaps_mv(30.0, []) == 0.0
