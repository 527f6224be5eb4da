"""Verdicts: state, worst place, margin and error for every quantity."""

from dataclasses import replace

import numpy as np
import pytest
from scanward.cases.job import Limit
from scanward.cases.judge import CLOSE, FAILED, MET, OPEN, judge
from scanward.cases.result import Accuracy
from synthetic import sheet_result

CONE = np.radians(60)


def verdict(limit, errors=None, **kwargs):
    result = sheet_result(limits=(limit,), **kwargs)
    return judge(replace(result, accuracy=Accuracy(errors=errors or {})))[0]


def test_reflection_is_worst_where_the_arrays_say():
    result = sheet_result(limits=(Limit("reflection", -6.0, CONE),))
    level = 20 * np.log10(np.abs(result.response.reflection[..., 0]) + 1e-300)
    inside = result.job.scan.points.theta <= CONE + 1e-9
    v = judge(result)[0]
    assert v.worst == pytest.approx(level[:, inside].max())
    assert v.port == "east" and v.frequency == 5.6e9 and np.degrees(v.theta) == pytest.approx(60)
    assert v.margin == pytest.approx(-6 - v.worst) and v.points == inside.sum() * 3


@pytest.mark.parametrize(("shift", "state", "holds"), [(1, MET, True), (-1, FAILED, False)])
def test_a_clear_distance_decides(shift, state, holds):
    worst = verdict(Limit("reflection", -6.0, CONE)).worst
    v = verdict(Limit("reflection", worst + shift, CONE), {"reflection": 0.005})
    assert (v.state, v.holds) == (state, holds)
    assert v.margin == pytest.approx(shift)


@pytest.mark.parametrize(("shift", "holds"), [(0.05, True), (-0.05, False)])
def test_a_distance_within_the_error_is_too_close_to_call(shift, holds):
    """The amplitude error 0.01 at -7.9 dB is 0.21 dB."""
    worst = verdict(Limit("reflection", -6.0, CONE)).worst
    v = verdict(Limit("reflection", worst + shift, CONE), {"reflection": 0.01})
    assert (v.state, v.holds) == (CLOSE, holds)
    assert v.error == pytest.approx(20 * np.log10(1 + 0.01 / 10 ** (worst / 20)))


def test_without_an_estimate_the_error_is_unknown_and_the_state_plain():
    v = verdict(Limit("gain_drop", 9.0, CONE))
    assert v.state == MET and np.isnan(v.error)


def test_the_cone_restricts_the_points():
    wide, narrow = (verdict(Limit("reflection", -6.0, np.radians(c))) for c in (60, 20))
    assert narrow.worst < wide.worst and narrow.points < wide.points


def test_gain_drop_is_zero_at_broadside_and_follows_the_co_polar_gain():
    assert verdict(Limit("gain_drop", 1.0, 0.0)).worst == pytest.approx(0, abs=1e-12)
    result = sheet_result(limits=(Limit("gain_drop", 1.0, CONE),))
    co = result.co_cross_gain[0]
    inside = result.job.scan.points.theta <= CONE + 1e-9
    assert judge(result)[0].worst == pytest.approx((co[:, [0]] - co)[:, inside].max())


def test_efficiency_is_a_lower_bound():
    v = verdict(Limit("efficiency", 0.99, CONE), loss=5.0)
    assert not v.holds and v.margin == pytest.approx(v.worst - 0.99) and 0.8 < v.worst < 0.99
    assert "at least" in v.requirement


def test_linear_polarisation_fails_any_axial_ratio():
    assert verdict(Limit("axial_ratio", 3.0, CONE)).worst == np.inf


def test_no_grating_lobe_meets_any_limit():
    v = verdict(Limit("grating_lobe", -30.0, CONE), {"grating_lobe": 1e-3})
    assert v.worst == -np.inf and v.state == MET


def test_cross_polar_of_a_current_sheet_vanishes_in_the_principal_planes_only():
    v = verdict(Limit("cross_polar", -15.0, CONE))
    assert abs(np.sin(2 * v.phi)) > 0.5 and v.worst > -40


def test_an_undriven_port_cannot_be_judged():
    v = verdict(Limit("reflection", -6.0, CONE, "north"), ports=2)
    assert v.state == OPEN and not v.holds and "north" in v.reason


def test_a_cone_without_points_or_broadside_is_not_judged():
    result = sheet_result(limits=(Limit("gain_drop", 3.0, CONE), Limit("reflection", -6.0, -1.0)))
    scan = result.job.scan
    moved = replace(scan.points, u=scan.points.u + 0.05)
    job = replace(result.job, scan=replace(scan, points=moved))
    drop, reflection = judge(replace(result, job=job))
    assert drop.state == OPEN and "broadside" in drop.reason
    assert reflection.state == OPEN and "cone" in reflection.reason


def test_a_number_that_is_not_finite_is_never_met():
    result = sheet_result()
    result.sweep.scattering[1, 3] = np.nan
    v = judge(result)[0]
    assert v.state == OPEN and not v.holds
