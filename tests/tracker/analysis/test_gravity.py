"""Normal gravity against the WGS 84 table and the formula's published constants."""

import pytest

from tracker.analysis.gravity import normal_gravity


@pytest.mark.parametrize(
    ("latitude", "ground", "high"),  # closed form, agrees with boule 0.6.0 within 1e-7 m/s^2
    [
        (0, 9.7803253, 9.7772384),
        (30, 9.7932473, 9.7901614),
        (45, 9.8061978, 9.8031129),
        (60, 9.8191770, 9.8160932),
        (90, 9.8321849, 9.8291023),
    ],
)
def test_table_of_wgs84(latitude, ground, high):
    assert normal_gravity(latitude) == pytest.approx(ground, abs=6e-8)
    # the second-order height term stays within 4e-6 m/s^2 of the closed form at 1000 m (NIMA TR8350.2)
    assert normal_gravity(latitude, 1000) == pytest.approx(high, abs=4e-6)
    assert normal_gravity(-latitude) == normal_gravity(latitude)


def test_measured_stations_lie_within_a_thousandth():
    """Sevres 9.809257 (ICAG-2001, Metrologia 39, 407), Gaithersburg 9.801018 (Tate, J. Res. NBS 70C, 1966); places from memory."""
    assert normal_gravity(48.829, 66) == pytest.approx(9.809257, abs=1e-3)
    assert normal_gravity(39.13, 130) == pytest.approx(9.801018, abs=1e-3)


def test_a_latitude_beyond_the_pole_is_refused():
    with pytest.raises(ValueError, match="-90 to 90"):
        normal_gravity(91)
