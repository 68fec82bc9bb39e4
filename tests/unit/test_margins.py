"""Margins: signs, words, totals and errors, against vector algebra and closed forms."""

import json

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from restore.errors import InputError, OutsideHistoryError
from restore.geometry.sphere import lat_lon
from restore.history.rows import Row
from restore.history.store import History
from restore.motion.margins import margin_line, margin_rates, margin_totals
from restore.outlines import Outlines

R = 6371.0088
NORTH_SOUTH = (np.array([-5.0, 5.0]), np.array([0.0, 0.0]))


def turning(lat, lon, deg_per_myr, oldest=10.0, covariance=None):
    """Plate A turns about a pole relative to B at a constant rate, forward in time."""
    rows = [Row("A", "B", 0.0, 0.0, 0.0, 0.0)]
    rows.append(Row("A", "B", oldest, lat, lon, -deg_per_myr * oldest, covariance))
    return History.from_rows(rows)


def four_orders(line, side_of_a):
    """The line both ways round and the pair both ways, with the plate that is then on the left."""
    lat, lon = line
    other = {"A": "B", "B": "A"}
    for reverse in (False, True):
        drawn = (lat[::-1], lon[::-1]) if reverse else line
        left = other[side_of_a] if reverse else side_of_a
        for pair in (("A", "B"), ("B", "A")):
            yield drawn, pair, left


@pytest.mark.parametrize(
    ("pole", "rate", "word"),
    [
        # A lies east of a north-south line at 0N 0E; the rotation's sense is by the right hand
        ((0.0, -90.0), 1.0, "left-lateral"),  # moves north (computed by a separate program, CASES)
        ((0.0, 90.0), 1.0, "right-lateral"),  # moves south
        ((90.0, 0.0), 1.0, "opening"),  # moves east, away
        ((-90.0, 0.0), 1.0, "closing"),  # moves west, towards
    ],
)
def test_the_word_does_not_depend_on_how_the_line_and_the_pair_were_written(pole, rate, word):
    """Line reversed, pair swapped, both, neither: one word, and the same signed components."""
    history = turning(*pole, rate)
    seen = []
    for line, pair, left in four_orders(NORTH_SOUTH, "B"):
        segments = margin_line([line], pair, left=left, every_km=1e6)
        found = margin_rates(history, pair, segments)
        assert found.regime == [word]
        seen.append((found.normal_mm_yr[0], found.parallel_mm_yr[0]))
    # one degree per Myr at 90 degrees from the pole: 111.195 mm/yr (constants of the sphere)
    expected = {"opening": (1, 0), "closing": (-1, 0), "right-lateral": (0, 1), "left-lateral": (0, -1)}
    np.testing.assert_allclose(seen, [np.array(expected[word]) * np.deg2rad(1.0) * R] * 4, atol=1e-9)


def test_components_are_those_of_the_velocity_vector():
    """Normal and parallel equal the projections of omega x r on the segment's own directions."""
    history = turning(35.0, 60.0, 0.7)
    lat, lon = np.array([-20.0, -5.0, 12.0]), np.array([30.0, 38.0, 33.0])
    segments = margin_line([(lat, lon)], ("A", "B"), left="A", every_km=400.0)
    found = margin_rates(history, ("A", "B"), segments)
    axis = np.array([np.cos(np.deg2rad(35)) * np.cos(np.deg2rad(60)),
                     np.cos(np.deg2rad(35)) * np.sin(np.deg2rad(60)), np.sin(np.deg2rad(35))])  # fmt: skip
    velocity = np.cross(np.deg2rad(0.7) * axis, segments.middle) * R
    along = segments.end - segments.start
    along /= np.linalg.norm(along, axis=1, keepdims=True)
    to_a = np.cross(segments.middle, along)  # up x along: to the left, where A is
    np.testing.assert_allclose(found.normal_mm_yr, np.sum(velocity * to_a, axis=1), atol=1e-9)
    sliding = np.sum(velocity * np.cross(to_a, segments.middle), axis=1)
    np.testing.assert_allclose(found.parallel_mm_yr, sliding, atol=1e-9)
    size = np.hypot(found.normal_mm_yr, found.parallel_mm_yr)
    np.testing.assert_allclose(size, found.rates.speed_mm_yr, rtol=1e-12)
    cosine = np.abs(found.normal_mm_yr) / size
    np.testing.assert_allclose(np.cos(np.deg2rad(found.obliquity_deg)), cosine, atol=1e-12)


def test_area_made_along_a_meridian_is_that_of_the_zone():
    """A line along a meridian, opened about the pole: R^2 angle (sin a - sin b), to 1e-9."""
    history = turning(90.0, 0.0, 1.5, oldest=20.0)
    line = (np.array([10.0, 60.0]), np.array([0.0, 0.0]))
    for every in (1e6, 300.0):
        segments = margin_line([line], ("A", "B"), left="B", every_km=every)
        made = margin_totals(history, ("A", "B"), segments, 8.0, 2.0)
        zone = R**2 * np.deg2rad(1.5 * 6.0) * (np.sin(np.deg2rad(60)) - np.sin(np.deg2rad(10)))
        assert made["area_km2"].sum() == pytest.approx(zone, rel=1e-9)
        np.testing.assert_allclose(made["normal_km"] * made["length_km"], made["area_km2"], rtol=1e-12)


def test_totals_of_a_composed_chain_equal_a_fine_sum_of_rates():
    """Through a middle plate the total equals small steps of the rates, to a part in a million."""
    rows = []
    for plate, partner, lat, lon, rate in (("A", "M", 60, 20, 0.5), ("M", "B", -30, 100, 0.8)):
        rows.append(Row(plate, partner, 0.0, 0, 0, 0.0))
        rows += [Row(plate, partner, t, lat + t, lon, rate * t) for t in (7.0, 20.0)]
    history = History.from_rows(rows)
    segments = margin_line(
        [(np.array([0.0, 8.0]), np.array([5.0, 9.0]))], ("A", "B"), left="A", every_km=1e6
    )
    made = margin_totals(history, ("A", "B"), segments, 15.0, 3.0)["area_km2"][0]
    steps = 4000
    ages = 3.0 + (np.arange(steps) + 0.5) * 12.0 / steps
    total = 0.0
    for age in ages[::10]:
        found = margin_rates(history, ("A", "B"), segments, age)
        total += float(found.normal_mm_yr[0]) * 120.0 / steps
    # the rate at the middle of a chord against its mean along it: second order in the length
    assert made == pytest.approx(total * segments.length_rad[0] * R, rel=3e-3)


def test_the_side_comes_from_outlines(tmp_path):
    """Which plate is on which side is seen in the outlines, whatever the drawing direction."""
    boxes = {"A": (0.0, 40.0), "B": (-40.0, 0.0)}
    features = [
        {
            "type": "Feature",
            "properties": {"plate": plate},
            "geometry": {
                "type": "Polygon",
                "coordinates": [[[west, -30.0], [east, -30.0], [east, 30.0], [west, 30.0], [west, -30.0]]],
            },
        }
        for plate, (west, east) in boxes.items()
    ]
    text = json.dumps({"type": "FeatureCollection", "features": features})
    (tmp_path / "o.geojson").write_text(text)
    outlines = Outlines.read(tmp_path / "o.geojson")
    history = turning(90.0, 0.0, 1.0)
    for line in (NORTH_SOUTH, tuple(part[::-1] for part in NORTH_SOUTH)):
        segments = margin_line([line], ("A", "B"), outlines=outlines)
        assert set(margin_rates(history, ("A", "B"), segments).regime) == {"opening"}
    far = (np.array([50.0, 60.0]), np.array([100.0, 100.0]))
    with pytest.raises(
        InputError, match="do not show A on one side and B on the other, 2 km off the line, but no plate"
    ):
        margin_line([far], ("A", "B"), outlines=outlines)


def test_sigmas_follow_drawn_rows():
    """Sigmas of both components against a seeded Monte Carlo of the row, within 3 %."""
    sigma = np.diag([1.0, 2.0, 1.5]) * 6.0 / R
    history = turning(40.0, 10.0, 0.6, covariance=sigma @ sigma)
    segments = margin_line(
        [(np.array([0.0, 4.0]), np.array([50.0, 52.0]))], ("A", "B"), left="A", every_km=1e6
    )
    found = margin_rates(history, ("A", "B"), segments)
    random = np.random.default_rng(5)
    row = history.rows.rotations().quaternions[1]
    drawn = []
    for u in random.normal(size=(4000, 3)) @ sigma:
        turned = Rotation.from_quat(row, scalar_first=True) * Rotation.from_rotvec(u)
        omega = -turned.as_rotvec() / 10.0
        velocity = np.cross(omega, segments.middle[0]) * R
        along = segments.end[0] - segments.start[0]
        along /= np.linalg.norm(along)
        left = np.cross(segments.middle[0], along)
        drawn.append([velocity @ left, velocity @ np.cross(left, segments.middle[0])])
    spread = np.std(drawn, axis=0)
    assert found.normal_sigma_mm_yr[0] == pytest.approx(spread[0], rel=0.03)
    assert found.parallel_sigma_mm_yr[0] == pytest.approx(spread[1], rel=0.03)


def test_lines_that_are_none_and_ages_out_of_order():
    """One point, the same point twice, a foreign plate, ages the wrong way or beyond: each said."""
    with pytest.raises(InputError, match="line 1 has 1 different points; a margin needs two"):
        margin_line([(np.array([1.0, 1.0]), np.array([2.0, 2.0]))], ("A", "B"))
    with pytest.raises(InputError, match="left = 'C': must be one of A and B"):
        margin_line([NORTH_SOUTH], ("A", "B"), left="C")
    segments = margin_line([NORTH_SOUTH], ("A", "B"), left="A")
    history = turning(90.0, 0.0, 1.0)
    with pytest.raises(InputError, match="the first age must be the older one"):
        margin_totals(history, ("A", "B"), segments, 2.0, 8.0)
    with pytest.raises(OutsideHistoryError, match=r"outside the history; the chain holds at 0\.\.10 Ma"):
        margin_rates(history, ("A", "B"), segments, 11.0)


def test_a_margin_at_rest_has_no_regime():
    """Without motion there is no word and no obliquity."""
    rows = [Row("A", "B", 0.0, 0, 0, 0.0), Row("A", "B", 10.0, 0, 0, 0.0)]
    segments = margin_line([NORTH_SOUTH], ("A", "B"), left="A", every_km=1e6)
    found = margin_rates(History.from_rows(rows), ("A", "B"), segments)
    assert found.regime == [""]
    assert np.isnan(found.obliquity_deg[0])
    assert lat_lon(segments.middle)[0][0] == pytest.approx(0.0, abs=1e-12)
