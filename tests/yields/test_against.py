"""Yield sets side by side: against the tables themselves, and numpy's own interpolation."""

import numpy as np
import pytest

from steelyard.yields import load
from steelyard.yields.against import against
from steelyard.yields.errors import InputError

KOBAYASHI, RATHER = "kobayashi-2006", "limongi-chieffi-2018-R-v000"


def test_models_are_as_published():
    found = against([load(KOBAYASHI), load("limongi-chieffi-2018-M-v000")], ["O16", "Fe56"], 0.02)
    # Kobayashi et al. 2006, ApJ 653, 1145, machine-readable table: explosion of 20 Msun at Z = 0.02
    grid = load(KOBAYASHI)
    at = list(found.mass).index(20)
    explosion = grid.at(0.02).listed[list(grid.at(0.02).mass).index(20), grid.species.index("O16")]
    wind = grid.at(0.02).wind[list(grid.at(0.02).mass).index(20)]
    initial = grid.at(0.02).initial[grid.species.index("O16")]
    assert found.values[0, at, 0] == pytest.approx(explosion + wind * initial, rel=1e-14)
    assert explosion == 1.05 and found.used[0] == "Z = 0.02"
    assert np.isnan(found.values[1]).all()  # elements only: no nuclides to compare


def test_between_models_and_metallicities_it_is_straight():
    grids = [load(KOBAYASHI), load(RATHER)]
    found = against(grids, ["O"], 0.01, "net")
    one = grids[1]
    lo, hi = one.slices[2:]
    x = np.log(0.01 / lo.metallicity) / np.log(hi.metallicity / lo.metallicity)
    column = one.species.index("O")
    at18 = [np.interp(18, s.mass, s.net[:, column]) for s in (lo, hi)]
    k = list(found.mass).index(18)
    assert found.values[1, k, 0] == pytest.approx((1 - x) * at18[0] + x * at18[1], rel=1e-12)
    assert not found.model[1, k] and found.model[0, k]
    assert np.isnan(found.values[0, -1, 0]) and found.mass[-1] > 40
    assert found.dex[1, 0, 0] == pytest.approx(np.log10(found.values[1, 0, 0] / found.values[0, 0, 0]))
    assert found.used == ("Z = 0.004 and 0.02, between", "Z = 0.00323599 and 0.01345, between")


def test_missing_is_not_zero():
    found = against([load("karakas-2010"), load("marigo-2001")], ["C", "Mg"], 0.008)
    assert np.isnan(found.values[1, :, 1]).all() and not np.isnan(found.values[0, :, 1]).all()
    told = found.to_dict()
    assert set(told["yields"]["marigo-2001"]["Mg"]) == {None} and told["derived"]["karakas-2010"] is True


@pytest.mark.parametrize(
    ("ids", "species", "says"),
    [
        ([KOBAYASHI], ["O"], "two sets"),
        ([KOBAYASHI, KOBAYASHI], ["O"], "each once"),
        ([KOBAYASHI, "nomoto-1997-w7"], ["O"], "single events"),
        ([KOBAYASHI, RATHER], ["Eu"], "follows Eu"),
    ],
)
def test_refusals(ids, species, says):
    with pytest.raises(InputError, match=says):
        against([load(one) for one in ids], species, 0.02)
