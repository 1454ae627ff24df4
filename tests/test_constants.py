"""Tidal constituents against a published list of speeds."""

import pytest

from shelfmap.constants import ASTRONOMICAL_RATES_DEG_PER_H, CONSTITUENTS, EARTH_ROTATION_RAD_S, GRAVITY_M_S2

# Speeds, degrees per hour, read in the analysis list of the UK National Tidal and Sea Level Facility and British
# Oceanographic Data Centre (short_tide_list.html, integers times 1e7); periods follow from them.
READ_SPEEDS = {
    "Mm": (0.5443747, 661.30920), "MSf": (1.0158958, 354.36707), "Q1": (13.3986609, 26.8683567),
    "O1": (13.9430356, 25.8193417), "pi1": (14.9178647, 24.1321401), "P1": (14.9589314, 24.0658902),
    "K1": (15.0410686, 23.9344696), "psi1": (15.0821353, 23.8692992), "phi1": (15.1232059, 23.8044765),
    "J1": (15.5854433, 23.0984767), "OO1": (16.1391017, 22.3060742), "2N2": (27.8953548, 12.9053745),
    "mu2": (27.9682084, 12.8717576), "N2": (28.4397295, 12.6583482), "nu2": (28.5125831, 12.6260044),
    "M2": (28.9841042, 12.4206012), "L2": (29.5284789, 12.1916202), "T2": (29.9589333, 12.0164492),
    "S2": (30.0000000, 12.0000000), "K2": (30.0821373, 11.9672348), "MN4": (57.4238337, 6.2691739),
    "M4": (57.9682084, 6.2103006), "MS4": (58.9841042, 6.1033393), "M6": (86.9523127, 4.1402004),
}  # fmt: skip


@pytest.mark.parametrize("name", READ_SPEEDS)
def test_speed_and_period_as_published(name):
    """To the last digit of the list, 1e-7 degrees per hour; periods to the relative error that is."""
    speed, period = READ_SPEEDS[name]
    assert CONSTITUENTS[name].speed_deg_per_h == pytest.approx(speed, abs=1.01e-7)
    assert CONSTITUENTS[name].period_h == pytest.approx(period, rel=1.01e-7 / speed + 1e-8)


def test_speeds_made_of_others():
    """Compound tides: M4 and M6 are multiples of M2, MS4 and MN4 sums, S1 half of S2."""
    speed = {name: constituent.speed_deg_per_h for name, constituent in CONSTITUENTS.items()}
    assert speed["M4"] == pytest.approx(2 * speed["M2"], rel=1e-14)
    assert speed["M6"] == pytest.approx(3 * speed["M2"], rel=1e-14)
    assert speed["MS4"] == pytest.approx(speed["M2"] + speed["S2"], rel=1e-14)
    assert speed["MN4"] == pytest.approx(speed["M2"] + speed["N2"], rel=1e-14)
    assert speed["S1"] == pytest.approx(15.0, rel=1e-14)


def test_names_differ_when_lower_cased_and_speeds_rise():
    """Layer columns are lower case: no two names may fall together; the table runs in order of speed."""
    names = [name.lower() for name in CONSTITUENTS]
    assert len(set(names)) == len(names)
    assert all(name == constituent.name for name, constituent in CONSTITUENTS.items())
    speeds = [constituent.speed_deg_per_h for constituent in CONSTITUENTS.values()]
    assert speeds == sorted(set(speeds))


def test_rates_and_physical_constants():
    """Lunar time is 15 - s + h; gravity and rotation as the results are stated for."""
    lunar, s, h = ASTRONOMICAL_RATES_DEG_PER_H[:3]
    assert lunar == pytest.approx(15 - s + h, rel=1e-15)
    assert (GRAVITY_M_S2, EARTH_ROTATION_RAD_S) == (9.81, 7.292115e-5)


def test_table_cannot_be_changed():
    """One table for all: it is read-only."""
    with pytest.raises(TypeError, match="does not support item assignment"):
        CONSTITUENTS["X"] = CONSTITUENTS["M2"]
