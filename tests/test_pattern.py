"""Patterns against closed forms: Hannan's ceiling, Ludwig 3, circular sense, power sums."""

import numpy as np
import pytest
from scanward.solver import pattern
from scanward.solver.result import ScanPoints, Sweep
from synthetic import CENTRE, TABLE, sheet_sweep

ANYWHERE = ScanPoints.from_angles(np.radians([0, 20, 45, 70, 30]), np.radians([10, 0, 45, 200, 300]))


def test_matched_half_wave_cell_has_hannan_gain():
    """CLOSED (Hannan 1964): 4 pi S / lambda^2 with S = lambda^2 / 4 is 4.971 dBi."""
    area = (pattern.LIGHT_SPEED / CENTRE) ** 2 / 4
    sweep = sheet_sweep(CENTRE, ScanPoints.from_angles(0.0, 0.0))
    gain = pattern.respond(sweep, [1.0], area).gain
    assert pattern.decibel(gain) == pytest.approx(4.971, abs=0.001)


def test_mismatch_and_scan_lower_the_gain_by_the_reflected_power():
    """CLOSED: G = 4 pi S cos(theta) / lambda^2 (1 - |Gamma|^2) for one lossless propagating wave."""
    response = pattern.respond(sheet_sweep(5.1e9, ANYWHERE), [1.0], 7e-4)
    expected = response.ceiling * (1 - np.abs(response.reflection[..., 0]) ** 2)
    np.testing.assert_allclose(response.gain, expected, rtol=1e-12)
    np.testing.assert_allclose(response.ceiling[0, 2] / response.ceiling[0, 0], np.cos(np.pi / 4), rtol=1e-12)


def test_power_is_accounted_for_with_two_driven_lossy_ports():
    response = pattern.respond(
        sheet_sweep([5e9, 5.8e9], ANYWHERE, ports=2, loss=7.0), [1.0, 0.4 - 0.9j], 7e-4
    )
    assert np.abs(response.balance).max() < 1e-12
    assert response.absorbed.min() > 0.01
    np.testing.assert_allclose(
        response.efficiency, response.radiated.sum(-1) / (1 - response.reflected), rtol=1e-12
    )


def test_an_undriven_port_has_no_active_reflection():
    response = pattern.respond(sheet_sweep(CENTRE, ANYWHERE, ports=2), [1.0, 0.0], 7e-4)
    assert np.isnan(response.reflection[..., 1]).all()
    assert np.isfinite(response.reflection[..., 0]).all()


def test_drive_is_checked():
    sweep = sheet_sweep(CENTRE, ANYWHERE)
    with pytest.raises(ValueError, match="1 ports"):
        pattern.respond(sweep, [1.0, 1.0], 7e-4)
    with pytest.raises(ValueError, match="no port is driven"):
        pattern.respond(sweep, [0.0], 7e-4)


def test_embedded_patterns_superpose_to_the_driven_pattern():
    sweep = sheet_sweep(CENTRE, ANYWHERE, ports=2)
    drive = np.array([0.6, 0.8j])
    embedded = pattern.embedded_patterns(sweep, 7e-4)
    together = np.einsum("fspc,p->fsc", embedded, drive)
    np.testing.assert_allclose(together, pattern.respond(sweep, drive, 7e-4).field, atol=1e-12)


@pytest.mark.parametrize("reference", [0.0, np.pi / 2, 0.7])
def test_ludwig3_of_a_huygens_source_has_no_cross_polarisation(reference):
    """CLOSED: theta-hat cos(phi - r) - phi-hat sin(phi - r) is purely co-polar, and power is kept."""
    phi = np.linspace(0, 2 * np.pi, 9)
    field = np.stack([np.cos(phi - reference), -np.sin(phi - reference)], axis=-1).astype(complex)
    co, cross = pattern.ludwig3(field, phi, reference)
    np.testing.assert_allclose(co, 1, atol=1e-15)
    np.testing.assert_allclose(cross, 0, atol=1e-15)


def test_ludwig3_at_broadside_is_the_cartesian_component():
    """CLOSED: at theta = 0 the co-polar part for reference x is E_x whatever phi names the basis."""
    phi, (ex, ey) = np.array([0.3, 1.9]), (0.2 + 1j, -0.7 + 0.1j)
    field = np.stack([ex * np.cos(phi) + ey * np.sin(phi), -ex * np.sin(phi) + ey * np.cos(phi)], axis=-1)
    co, cross = pattern.ludwig3(field, phi)
    np.testing.assert_allclose(co, ex, rtol=1e-14)
    np.testing.assert_allclose(cross, ey, rtol=1e-14)
    assert pattern.ludwig3(field, phi, np.pi / 2)[0] == pytest.approx(np.full(2, ey))


def test_circular_sense_follows_the_field_vector_in_time():
    """IEEE Std 145: right-hand when the vector turns with the fingers, thumb along propagation (theta x
    phi = r)."""
    field = np.array([1.0, -1j]) / np.sqrt(2)
    right, left = pattern.circular(field)
    assert abs(right) == pytest.approx(1) and abs(left) == pytest.approx(0, abs=1e-15)
    early, late = ((field * np.exp(1j * phase)).real for phase in (0.0, 0.1))
    assert early[0] * late[1] - early[1] * late[0] > 0  # turns from theta towards phi


def test_axial_ratio_of_known_ellipses():
    fields = np.array([[1, 1j], [2, 1j], [1, 1], [1, 0]], dtype=complex)
    np.testing.assert_allclose(pattern.axial_ratio(fields), [1, 2, np.inf, np.inf])


def test_co_polarisation_choices():
    field, phi = np.array([[1.0, -1j]]), np.zeros(1)
    assert abs(pattern.co_cross(field, phi, "left", 0)[0][0]) < 1e-15
    assert abs(pattern.co_cross(field, phi, "x", 0)[0][0]) == pytest.approx(1)
    with pytest.raises(ValueError, match="'slant'"):
        pattern.co_cross(field, phi, "slant", 0)


def test_grating_lobe_power_is_relative_to_the_main_wave():
    scan = ScanPoints.from_angles([0.0, 0.3], [0.0, 0.0])
    base = sheet_sweep(CENTRE, scan)
    waves = base.waves.copy()
    waves[0, 1, 2:, 0] = 0.3, 0.4
    sweep = Sweep(base.frequency, scan, base.reference, base.impedance, base.scattering, waves, TABLE,
                  base.loss, base.loss_names, base.residual)  # fmt: skip
    response = pattern.respond(sweep, [2.0], 7e-4)
    main = np.sum(np.abs(waves[0, 1, :2, 0]) ** 2)
    np.testing.assert_allclose(response.grating, [[0, 0.25 / main]])
    assert response.orders.tolist() == [[0, 0, 1], [-1, 0, 1]]
    np.testing.assert_allclose(response.radiated[0, 1], [main, 0.25])


def test_invisible_space_has_no_gain():
    sweep = sheet_sweep(CENTRE, ScanPoints.from_cosines([1.2], [0.0]))
    assert np.isnan(pattern.respond(sweep, [1.0], 7e-4).gain).all()
