"""Type Ia supernovae: Maoz & Graur (2017, ApJ 848, 25); Nomoto et al. (1997, Nucl. Phys. A 621, 467)."""

import numpy as np
import pytest

from steelyard.integrate import DelayedSource, Edges, Join, Population, StellarSource
from steelyard.yields import load

HUBBLE = 13.8e9


def weighed(ages, **options):
    late = DelayedSource("thermonuclear", ["nomoto-1997-w7"], "1.3e-3 / Msun", "maoz-graur-2017")
    return Population(0.014, [StellarSource("agb", ["karakas-2010"]), late], **options).weigh(ages)


def test_number_of_events_in_a_hubble_time():
    """1.3 +- 0.1 per 1000 Msun formed, over 13.7 or so Gyr (Maoz & Graur 2017, abstract)."""
    out = weighed([HUBBLE, 4e7, 1e6])
    assert float(out.events["thermonuclear"][0]) == pytest.approx(1.3e-3, rel=1e-14)
    assert out.events["thermonuclear"][1:].tolist() == [0.0, 0.0]


def test_the_rate_falls_as_time_to_the_1_1():
    """Slope -1.1 (Maoz & Graur 2017), normalised in closed form between 40 Myr and 13.8 Gyr."""
    age = np.array([1e8, 1e9, 1e10])
    rate = weighed(age).event_rates["thermonuclear"]
    norm = (4e7**-0.1 - HUBBLE**-0.1) / 0.1
    np.testing.assert_allclose(rate, 1.3e-3 * age**-1.1 / norm, rtol=1e-12)


def test_one_w7_event():
    """1.374 Msun in all, 0.613 Msun of 56Fe (Nomoto et al. 1997, table 1): iron per Msun formed is 8.0e-4."""
    event = load("nomoto-1997-w7").slices[0]
    assert float(event.ejected[0]) == pytest.approx(1.374, abs=5e-4)
    assert load("nomoto-1997-w7").value("Fe56", float(event.mass[0]), event.metallicity) == 0.613
    out = weighed(HUBBLE, species="nuclides")
    assert float(out.get("Fe56", "thermonuclear")[0]) == pytest.approx(1.3e-3 * 0.613, rel=1e-13)
    assert float(out.ejected[1, 0]) == pytest.approx(1.3e-3 * float(event.ejected[0]), rel=1e-13)


def test_what_explodes_was_a_white_dwarf():
    """Mass of the exploded dwarfs leaves the remnants; the budget closes."""
    with_events = weighed(HUBBLE)
    without = Population(0.014, [StellarSource("agb", ["karakas-2010"])]).weigh(HUBBLE)
    gone = without.remnants_by_kind["white dwarf"] - with_events.remnants_by_kind["white dwarf"]
    np.testing.assert_allclose(gone, with_events.ejected[1], rtol=1e-12)
    np.testing.assert_allclose(
        with_events.living + with_events.remnants + with_events.returned, 1.0, atol=1e-13
    )


def test_iron_is_made_in_like_amounts_by_the_two_kinds_of_supernova():
    """Core collapse makes a third to two thirds of the iron (common practice), to a factor 1.5."""
    out = Population(
        0.02,
        [
            StellarSource("agb", ["karakas-2010", "doherty-2014"]),
            StellarSource("core-collapse", ["kobayashi-2006"]),
            DelayedSource("thermonuclear", ["nomoto-1997-w7"], 1.3e-3, "maoz-graur-2017"),
        ],
        joins=[Join(("agb", "core-collapse"))],
        edges=Edges(above="reach-up"),
    ).weigh(HUBBLE)
    iron = {s: float(out.get("Fe", s, "net")[0]) for s in out.sources}
    assert 0.22 < iron["core-collapse"] / sum(iron.values()) < 0.67
    assert abs(iron["agb"]) < 0.02 * iron["core-collapse"]


def test_the_iwamoto_models():
    """Iwamoto et al. (1999, ApJS 125, 439), table 3: W7 makes 0.626 Msun of 56Fe; from memory, to 5 %."""
    w7 = load("iwamoto-1999-W7")
    event = w7.slices[0]
    assert w7.value("Fe56", float(event.mass[0]), event.metallicity) == pytest.approx(0.626, rel=0.05)
    for name in ("W7", "W70", "WDD1", "WDD2", "WDD3", "CDD1", "CDD2"):
        assert 1.33 < float(load(f"iwamoto-1999-{name}").slices[0].ejected[0]) < 1.40
