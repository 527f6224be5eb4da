"""The comparison finds what was planted, says when it cannot tell, and does not cry wolf on clean data."""

import numpy as np
import pytest
from coupling_model import panel, scattering
from scanward.cases.bench_fit import _pairs, fit_bench, port_gain
from scanward.cases.comparison import compare, compare_files
from scanward.cases.comparison_charts import cut_groups
from scanward.cases.comparison_report import write_comparison
from scanward.cases.comparison_words import headline, parameter_rows, untested
from scanward.cases.explanations import MEASUREMENT, MODEL, SIZE
from scanward.cases.invented_measurement import MARK, Plant, invent, write_invented, write_invented_pattern
from scanward.cases.measured_scattering import MeasuredScattering
from scanward.cases.pattern_comparison import PatternUncertainty
from scanward.cases.scan_synthesis import synthesise
from scanward.cases.support import FALSE_ALARM, judge_support
from scanward.cases.uncertainty import Uncertainty

USE = Uncertainty.from_decibel(0.1, np.radians(1.0), -65.0)
PANEL = panel()
N = len(PANEL.ports)
RANDOM = np.random.default_rng(7)
DELAY, LOSS = RANDOM.uniform(-1e-9, 4e-9, N), RANDOM.uniform(0, 1.2, N)


def measured(plant, prediction=PANEL, uncertainty=USE):
    s = invent(prediction, uncertainty, plant)
    return MeasuredScattering(np.where(np.all(s == 0, axis=0), np.nan, s), uncertainty)


def compared(plant, **rest):
    return compare(PANEL, measured(plant), **rest)


def test_the_model_array_is_reciprocal_and_passive():
    np.testing.assert_allclose(PANEL.scattering, PANEL.scattering.transpose(0, 2, 1), atol=1e-15)
    assert np.linalg.svd(PANEL.scattering)[1].max() < 1


def test_clean_data_support_the_prediction():
    c = compared(Plant())
    assert c.supported and c.diagnosis.best == "" and "no disagreement" in c.diagnosis.sentence
    assert not c.diagnosis.swaps and not c.diagnosis.cabled and headline(c)[1] == "met"


def test_false_alarms_stay_below_what_is_stated():
    """Binomial: with at most one false alarm in a hundred, more than 6 of 200 have a chance below 0.5 per cent."""
    small, alarms = panel(3, 3, points=5), 0
    for seed in range(200):
        data = measured(Plant(seed=seed), small)
        scan = synthesise(data.scattering, small, USE, small.infinite.directions)
        fit = fit_bench(data.scattering, small, USE, cables=False)
        alarms += judge_support(data.scattering, fit.model, small, USE, scan).contradicted
    assert FALSE_ALARM == 0.01 and alarms <= 6


def test_an_uncertainty_stated_ten_per_cent_too_small_raises_no_alarm():
    small, alarms = panel(3, 3, points=5, sensitive=False), 0
    more = Uncertainty(1.1 * USE.magnitude, 1.1 * USE.phase, 1.1 * USE.floor)
    for seed in range(25):
        s = invent(small, more, Plant(seed=seed))
        c = compare(small, MeasuredScattering(s, USE))
        alarms += not c.supported or c.diagnosis.best != ""
    assert alarms <= 1


def test_the_statistics_of_clean_data_are_what_they_should_be():
    """CLOSED: chi-squared per degree of freedom has mean 1; the squared distance of 40 x 250 scan sums has mean 2."""
    small, level, distance = panel(3, 3, points=5, sensitive=False), [], []
    for seed in range(40):
        c = compare(small, measured(Plant(seed=1000 + seed), small))
        level.append(np.nanmean(c.support.statistic))
        distance.append(np.mean(c.support.distance**2))
        assert not c.diagnosis.swaps and not c.diagnosis.cabled
    assert np.mean(level) == pytest.approx(1.0, abs=0.02)  # 40 x 810 real numbers: +- 0.008
    assert np.mean(distance) == pytest.approx(2.0, abs=0.25)


def test_clean_data_move_no_parameter_beyond_chance_and_flag_no_explanation():
    small, pulls = panel(3, 3, points=5), []
    for seed in range(40):
        d = compare(small, measured(Plant(seed=seed), small)).diagnosis
        pulls.append(d.fits.parameters.moves / d.fits.parameters.moves_error)
        assert d.best == "" and not d.checks.failed
    assert np.std(pulls, axis=0) == pytest.approx([1, 1], abs=0.3)


def test_planted_parameters_come_back_with_their_errors():
    c = compared(Plant(moves={"arm": 0.4, "coupling strength": 0.04}))
    fit = c.diagnosis.fits.parameters
    assert c.diagnosis.best == MODEL and not c.supported and c.moved_support.holds
    assert np.all(np.abs(fit.moves - [0.4, 0.04]) < 4 * fit.moves_error)
    assert np.all(fit.moves_error < [0.002, 0.001])


def test_parameters_of_a_really_different_array_come_back():
    """The measured array is solved anew with its resonance moved, so that the linear fit is put to the test."""
    other = panel(resonance=5.4e9 / 1.004, sensitive=False)
    fit = compared(Plant(scattering=other.scattering)).diagnosis.fits.parameters
    assert fit.moves[0] == pytest.approx(0.4, abs=0.02) and abs(fit.moves[1]) < 0.01


def test_a_parameter_beyond_its_tolerance_is_held_and_reported():
    c = compared(Plant(moves={"arm": 2.0}))
    assert c.diagnosis.fits.chosen.moves[0] == pytest.approx(1.0, abs=1e-6)
    assert not c.moved_support.holds and "stops at its tolerance; without it" in parameter_rows(c)[0][4]


def test_only_the_named_parameters_are_fitted():
    c = compared(Plant(moves={"arm": 0.4}), fit=["coupling strength"])
    assert len(parameter_rows(c)) == 1 and not c.moved_support.holds


def test_planted_cables_come_back():
    c = compared(Plant(delay=DELAY, loss=LOSS))
    fit = c.diagnosis.fits.chosen
    assert c.diagnosis.best == MEASUREMENT and c.diagnosis.cabled
    assert np.all(np.abs(fit.delay - DELAY) < 5 * fit.delay_error) and np.max(fit.delay_error) < 1e-12
    assert np.all(np.abs(fit.loss - LOSS) < 5 * fit.loss_error) and np.max(fit.loss_error) < 0.03
    assert c.support.contradicted and c.corrected_support.holds and c.supported


def test_the_normal_matrix_is_that_of_the_written_out_jacobian():
    """CLOSED: J^T J with a row per coefficient, 1 in the columns of its two ports (2 in one for a reflection)."""
    weight = RANDOM.uniform(0, 1, (2, 4, 4))
    i, j = np.indices((4, 4)).reshape(2, -1)
    jacobian = np.eye(4)[i] + np.eye(4)[j]
    wanted = jacobian.T @ (weight.sum(axis=0).ravel()[:, None] * jacobian)
    np.testing.assert_allclose(_pairs(weight), wanted, rtol=1e-12)


def test_errors_stated_for_cables_are_the_scatter_of_many_trials():
    small, rest = panel(3, 3, points=5, sensitive=False), {"cables": True, "start": np.zeros(9)}
    fits = [fit_bench(invent(small, USE, Plant(seed=s)), small, USE, **rest) for s in range(80)]
    for name in ("delay", "loss"):
        scatter = np.std([getattr(fit, name) for fit in fits], axis=0)
        np.testing.assert_allclose(scatter, getattr(fits[0], f"{name}_error"), rtol=0.3)


def test_a_cable_delays_and_fades_as_stated():
    """CLOSED: 3 dB at the middle, 3 sqrt(f / f_c) dB elsewhere; exp(-j w t) lags, exp(+j w t) convention."""
    gain = port_gain(np.array([1e9, 3e9]), np.array([1e-10]), np.array([3.0]))[:, 0]
    np.testing.assert_allclose(20 * np.log10(np.abs(gain)), [-3 * np.sqrt(0.5), -3 * np.sqrt(1.5)], rtol=1e-12)
    np.testing.assert_allclose(np.degrees(np.angle(gain)), [-36, -108], rtol=1e-12)


def test_a_stated_decibel_is_its_share_of_the_magnitude():
    """CLOSED: d(20 log10 x) = 8.686 dx / x."""
    use = Uncertainty.from_decibel(0.08686, 0.01, -60.0)
    along, across = use.deviations(np.array([0.5, 0.0]))
    np.testing.assert_allclose(along, [np.sqrt(0.005**2 + 0.5e-6), np.sqrt(0.5e-6)], rtol=1e-4)
    np.testing.assert_allclose(across, [np.sqrt(0.005**2 + 0.5e-6), np.sqrt(0.5e-6)], rtol=1e-4)


def test_cables_are_reported_and_never_applied_silently():
    data = measured(Plant(delay=DELAY, loss=LOSS))
    c = compare(PANEL, data)
    np.testing.assert_array_equal(c.data.scattering, data.scattering)
    assert np.all(c.support.frequency_state == -1)


@pytest.mark.parametrize("pair", [(3, 7), (12, 13), (0, 24)])
def test_a_swapped_pair_is_found_and_not_undone_silently(pair):
    data = measured(Plant(swapped=(pair,)))
    c = compare(PANEL, data)
    assert [(s.one, s.two) for s in c.diagnosis.swaps] == [pair] and c.diagnosis.best == MEASUREMENT
    np.testing.assert_array_equal(c.data.scattering, data.scattering)
    assert c.support.contradicted and c.supported


def test_everything_at_once_is_taken_apart():
    c = compared(Plant(moves={"arm": 0.4}, delay=DELAY, loss=LOSS, swapped=((3, 7),)))
    fit = c.diagnosis.fits.both
    assert [(s.one, s.two) for s in c.diagnosis.swaps] == [(3, 7)] and c.diagnosis.best == MODEL
    # the cables belong to the measured ports: exchanged with them
    undone = np.arange(N)
    undone[[3, 7]] = 7, 3
    delay = DELAY
    assert fit.moves == pytest.approx([0.4, 0.0], abs=0.006)
    assert np.max(np.abs(np.sort(fit.delay) - np.sort(delay))) < 2e-12
    assert c.moved_support.holds and "Exchanged ports and cables explain part of it" in c.diagnosis.sentence


def test_one_row_finds_a_parameter_and_says_what_it_cannot():
    c = compared(Plant(moves={"arm": 0.4}, row=12))
    assert c.diagnosis.best == MODEL and c.diagnosis.fits.chosen.moves[0] == pytest.approx(0.4, abs=0.03)
    assert any("could be exchanged without showing" in note for note in c.diagnosis.notes)
    c = compared(Plant(delay=DELAY, loss=LOSS, row=12))
    assert any("nor from an exchange of ports" in note for note in c.diagnosis.notes)
    assert any("600 of 625 coefficients" in line for line in untested(c))


def test_a_row_without_its_reflection_determines_cables_in_sums_only():
    data = measured(Plant(delay=DELAY, loss=LOSS, row=12))
    data.scattering[:, 12, 12] = np.nan
    c = compare(PANEL, data)
    assert np.all(np.isinf(c.diagnosis.fits.cables.delay_error))
    assert any("in sums only" in note for note in c.diagnosis.notes)


def symmetric_error(mask):
    error = 1 + 0.1 * mask * np.exp(1j * RANDOM.uniform(0, 6, (N, N)))
    return PANEL.scattering * (error + error.T) / 2


def test_an_error_at_the_edges_is_laid_to_the_finite_size():
    edge = PANEL.depth == 0
    c = compared(Plant(scattering=symmetric_error(edge[:, None] | edge[None, :])))
    assert c.diagnosis.best == SIZE and c.diagnosis.edge_ratio > 2


def test_an_error_everywhere_that_nothing_explains_is_not_explained():
    c = compared(Plant(scattering=symmetric_error(np.ones((N, N)))))
    assert c.diagnosis.best == "" and "Cannot tell" in c.diagnosis.sentence


def test_non_reciprocal_data_are_the_measurements_fault():
    c = compared(Plant(scattering=PANEL.scattering * np.exp(1j * RANDOM.normal(0, 0.1, (N, N)))))
    assert c.diagnosis.best == MEASUREMENT and c.diagnosis.checks.reciprocity.failed and not c.supported


def test_active_data_are_the_measurements_fault():
    c = compared(Plant(scattering=2.2 * PANEL.scattering))
    assert c.diagnosis.best == MEASUREMENT and c.diagnosis.checks.passivity.failed and not c.supported
    assert "contradicts itself" in headline(c)[0]


def test_noise_limited_data_support_nothing_they_cannot_see():
    noisy = Uncertainty.from_decibel(0.1, np.radians(1), -20)
    c = compare(PANEL, measured(Plant(seed=3), uncertainty=noisy))
    assert c.diagnosis.checks.noise.failed and np.all(c.support.direction_state == 0)
    assert any("they prove little" in line for line in untested(c))


def test_the_finite_array_is_told_from_the_infinite_one():
    d = compared(Plant()).diagnosis
    assert d.finite_level < 1.1 < 2 < d.infinite_level


def test_the_scan_sum_of_the_whole_row_is_the_active_reflection():
    """CLOSED: with all elements excited a, b = S a, and the active reflection of port m is b_m / a_m."""
    u, v = 0.3, -0.2
    scan = synthesise(PANEL.scattering, PANEL, USE, np.array([[u, v]]))
    k = 2 * np.pi * PANEL.frequency / 299792458.0
    a = np.exp(-1j * k[:, None] * (PANEL.positions @ np.array([u, v])))
    b = np.einsum("fmn,fn->fm", PANEL.scattering, a)
    np.testing.assert_allclose(scan.measured[:, 0], (b / a)[:, 12], atol=1e-13)
    assert scan.port == 12 and not np.any(scan.bound)


def test_missing_coefficients_are_bounded():
    """What is left out of the sum never changes it by more than the bound says."""
    s = PANEL.scattering.copy()
    s[:, 12, [0, 7, 13]] = np.nan
    s[:, [0, 7, 13], 12] = np.nan
    scan = synthesise(s, PANEL, USE, PANEL.infinite.directions)
    away = np.abs(scan.finite - scan.measured)
    assert np.all(away <= scan.bound[:, None] + 1e-12) and away.max() > 0.5 * scan.bound.max()
    assert np.flatnonzero(scan.missing[0]).tolist() == [0, 7, 13]


def test_the_covariance_of_the_scan_sum_is_that_of_many_trials():
    direction = np.array([[0.4, 0.1]])
    trials = np.array([
        synthesise(invent(PANEL, USE, Plant(seed=s)), PANEL, USE, direction).measured[4, 0] for s in range(800)
    ])  # fmt: skip
    sampled = np.cov(trials.real, trials.imag)
    stated = synthesise(PANEL.scattering, PANEL, USE, direction).covariance[4, 0]
    np.testing.assert_allclose(sampled, stated, atol=0.15 * stated.max())


def test_cuts_of_opposite_half_planes_are_one():
    (one, two) = cut_groups(PANEL.infinite.directions)
    assert len(one[1]) == len(two[1]) == 25 and {round(np.degrees(g[0])) for g in (one, two)} == {0, 90}


@pytest.mark.parametrize(("turn", "gain", "good"), [(0, 0, True), (0, 2.0, False), (4, 0, False)])
def test_patterns_are_judged_and_their_pointing_reported(turn, gain, good, tmp_path):
    files, port_map = write_invented(tmp_path, PANEL, USE, Plant())
    path = write_invented_pattern(tmp_path / "cut.csv", PANEL, 0.2, -45, turn=np.radians(turn), gain=gain)
    c = compare_files(PANEL, files, port_map, USE, [path], PatternUncertainty(0.25, -42))
    (cut,) = c.patterns
    assert cut.supported == good and c.supported == good
    assert np.degrees(cut.pointing) == pytest.approx(turn, abs=0.35 if gain == 0 else 1.5)


def test_pages_and_tables_say_that_the_data_are_invented(tmp_path):
    plant = Plant(moves={"arm": 0.4}, delay=DELAY, loss=LOSS, swapped=((3, 7),))
    files, port_map = write_invented(tmp_path, PANEL, USE, plant)
    assert all(MARK in path.read_text()[:200] for path in (*files, port_map))
    written = write_comparison(tmp_path / "out", compare_files(PANEL, files, port_map, USE))
    for path in written:
        if path.suffix in (".html", ".csv"):
            assert "INVENTED" in path.read_text()
    page = written[0].read_text()
    assert "row 1, column 4 with row 2, column 3" in page and "nan" not in page.split("</style>")[1].split("<img")[0]
    assert {path.name for path in written} >= {"comparison-cables.csv", "comparison-residuals.csv"}


def test_two_ports_per_element_are_driven_as_stated():
    """Ports of the second name are terminated: they take part in nothing but the fits."""
    from dataclasses import replace

    sites = np.array([(c, r) for r in (1, 2) for c in (1, 2)])
    positions = np.repeat(PANEL.lattice.positions(sites), 2, axis=0) + np.tile([[0, 0], [3e-3, 3e-3]], (4, 1))
    s = scattering(PANEL.frequency, positions)
    both = type(PANEL).of_sites(
        sites, ("x", "y"), frequency=PANEL.frequency, scattering=s, reference=np.full(8, 50.0),
        lattice=PANEL.lattice, drive=np.tile([1.0, 0.0], 4).astype(complex),
    )  # fmt: skip
    scan = synthesise(s, both, USE, np.array([[0.0, 0.0]]))
    np.testing.assert_allclose(scan.measured[:, 0], s[:, 0, ::2].sum(axis=1))
    assert both.port_label(1) == "row 1, column 1, port y" and replace(both).centre == 0
