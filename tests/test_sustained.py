"""How much for how long, against a plain loop over candidates."""

import numpy as np
from test_quote import made_quotes

from sites.sustained import sustained


def test_every_length_against_a_plain_loop() -> None:
    quotes = made_quotes().quotes
    told = sustained(quotes)
    assert told.kw.shape == (6, 6)
    for row in range(6):
        for column, hours in enumerate(told.hours):
            steps = round(hours * 4)
            best = -np.inf
            for k in np.flatnonzero(quotes.site == row):
                first, last = quotes.window_start[k] - 12, quotes.window_end[k] - 12
                for at in range(first, last - steps + 1):
                    best = max(best, quotes.expected_kw[k, at : at + steps].min())
            if np.isfinite(best):
                assert told.kw[row, column] == best
                k = told.candidate[row, column]
                assert quotes.site[k] == row
                energy = (
                    quotes.expected_kw[k, quotes.window_start[k] - 12 : quotes.window_end[k] - 12].sum() / 4
                )
                np.testing.assert_allclose(told.cost_per_kwh[row, column], quotes.net_cost[k] / energy)
            else:
                assert np.isnan(told.kw[row, column])
                assert told.candidate[row, column] == -1


def test_longer_is_never_more_and_longer_than_the_event_is_nothing() -> None:
    told = sustained(made_quotes().quotes)
    assert np.nanmax(np.diff(told.kw, axis=1)) <= 0.0
    assert np.isfinite(told.kw[3, :3]).all()
    assert np.isnan(told.kw[:, 4:]).all()
