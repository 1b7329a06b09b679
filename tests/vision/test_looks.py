"""Places in the exposure against the integral that they stand for."""

import numpy as np
import pytest

from vision.track import LOOKS


@pytest.mark.parametrize("places", LOOKS, ids=len)
def test_the_mean_over_the_places_is_the_mean_over_the_exposure(places):
    # Chebyshev's quadrature with n equal weights is exact up to degree n (n + 1 where n is even), which defines it;
    # the nodes are those of Abramowitz and Stegun (1964), table 25.5, to five digits.
    n = len(places)
    for degree in range(n + 1 + (n % 2 == 0)):
        exact = 1.0 / (degree + 1) if degree % 2 == 0 else 0.0
        assert np.mean(np.array(places) ** degree) == pytest.approx(exact, abs=2e-5)


def test_more_places_serve_longer_smears():
    assert [len(places) for places in LOOKS] == sorted({len(places) for places in LOOKS})
