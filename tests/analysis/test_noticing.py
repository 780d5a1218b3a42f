"""Years to notice: by hand."""

import numpy as np
import pytest

from analysis.noticing import noticeable_gain, yearly_spread, years_to_notice


def test_a_year_of_two_years_windows_has_root_two_times_their_spread():
    values = np.array([1.0, 3.0])  # standard deviation root 2
    assert yearly_spread(values, 730.0) == pytest.approx(2.0)


def test_a_gain_of_two_spreads_shows_within_a_year():
    """1.959964 is the normal .975 quantile (any table)."""
    assert years_to_notice(0.02, 0.02) == pytest.approx(1.959964**2)
    assert years_to_notice(0.0392, 0.02) == pytest.approx(1.0, rel=1e-3)
    assert years_to_notice(0.0, 0.02) is None


def test_the_default_takes_the_most_watchful_player_ten_years():
    spread = np.array([[0.02, 0.02, 9.0], [0.03, 0.03, 0.03]])
    gain = noticeable_gain(spread)
    assert years_to_notice(gain, 0.02) == pytest.approx(10.0)
    assert years_to_notice(gain, 0.03) > 10.0
