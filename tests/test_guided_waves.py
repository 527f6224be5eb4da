"""Surface waves: the table of grounded slabs, closed forms, a dense scan, losses, and the lattice's hits."""

from __future__ import annotations

import numpy as np
import pytest
from reference_slab import SURFACE_WAVES, surface_wave_index, te1_cutoff
from scanward.geometry.lattice import Lattice
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from scanward.solver.dispersion import Dispersion
from scanward.solver.guided_waves import EDGE, _zeros_inside, circles_hit, guided_waves, mode_count
from scanward.solver.lines import ETA, Lines

K = 2 * np.pi


def _slab(permittivity, thickness, loss=0.0):
    return Stack((Layer(thickness, permittivity, loss),), True)


@pytest.mark.parametrize("row", SURFACE_WAVES)
def test_table_of_grounded_slabs(row):
    """CLOSED: TM0, blindness angles of two lattices, TE1 cut-off."""
    permittivity, thickness, index, at_50, at_55, cutoff = row
    stack = _slab(permittivity, thickness)
    (wave,) = guided_waves(stack, K)
    assert wave.name == "TM0"
    assert abs(wave.beta - index) < 5.1e-6
    assert abs(wave.beta - surface_wave_index(permittivity, thickness)) < 1e-12
    for period, angle in ((0.5, at_50), (0.55, at_55)):
        hits = circles_hit([wave], Lattice((period, 0), (0, period)), K, 0.0)
        assert hits[0].order == (-1, 0)
        assert abs(np.degrees(hits[0].theta) - angle) < 0.0051
    exact = te1_cutoff(permittivity)
    assert abs(exact - cutoff) < 5.1e-5
    assert mode_count(_slab(permittivity, exact * (1 - 1e-6)), K, "TE") == 0
    assert mode_count(_slab(permittivity, exact * (1 + 1e-6)), K, "TE") == 1


@pytest.mark.parametrize("thickness", [0.3, 1.1, 3.7])
def test_number_of_modes_of_a_grounded_slab(thickness):
    """CLOSED: TM_n above n pi, TE_n above (n - 1/2) pi of k d sqrt(eps - 1)."""
    v = K * thickness * np.sqrt(9.0)
    waves = guided_waves(_slab(10.0, thickness), K)
    assert sum(w.polarisation == "TM" for w in waves) == int(np.floor(v / np.pi)) + 1
    assert sum(w.polarisation == "TE" for w in waves) == int(np.floor(v / np.pi + 0.5))
    tm = [w.beta.real for w in waves if w.polarisation == "TM"]
    assert tm == sorted(tm, reverse=True)


def test_even_and_odd_modes_of_an_open_slab_are_half_of_a_grounded_one():
    """An image plane in the middle: TM over an electric wall, TE over a magnetic one are modes of the whole."""
    whole = {(w.polarisation, round(w.beta.real, 10)) for w in guided_waves(Stack((Layer(0.5, 4.0),)), K)}
    half = {(w.polarisation, round(w.beta.real, 10)) for w in guided_waves(_slab(4.0, 0.25), K)}
    assert half < whole
    assert {"TE0", "TM0"} <= {w.name for w in guided_waves(Stack((Layer(1e-4, 4.0),)), K)}


def test_air_guides_nothing():
    for stack in (Stack((Layer(0.3, 1.0),), True), Stack((Layer(0.3, 1.0),)), Stack((), True), Stack()):
        assert guided_waves(stack, K) == []


@pytest.mark.parametrize("thickness", [1e-6, 1e-3])
def test_very_thin_slab(thickness):
    """CLOSED, first order: sqrt(beta^2 - 1) = k d (1 - 1/eps)."""
    (wave,) = guided_waves(_slab(2.2, thickness), K)
    x = K * thickness * (1 - 1 / 2.2)
    assert wave.beta.real - 1 == pytest.approx(x**2 / 2, rel=max(3 * x, 1e-3))


def test_reactive_sheets_in_air():
    """CLOSED: TM on an inductive sheet sqrt(1 + (2X/eta)^2), TE on a capacitive one sqrt(1 + (eta/2X)^2)."""
    (tm,) = guided_waves(Stack((), False, (SheetImpedance(0.0, 300j),)), K)
    (te,) = guided_waves(Stack((), False, (SheetImpedance(0.0, -300j),)), K)
    assert (tm.name, te.name) == ("TM0", "TE0")
    assert tm.beta == pytest.approx(np.sqrt(1 + (600 / ETA) ** 2), rel=1e-12)
    assert te.beta == pytest.approx(np.sqrt(1 + (ETA / 600) ** 2), rel=1e-12)


def _random_stack(rng):
    layers = tuple(
        Layer(
            float(10 ** rng.uniform(-2, -0.3)), float(rng.uniform(1, 8)), 0.0, float(rng.choice([1, 1, 2.5]))
        )
        for _ in range(rng.integers(1, 5))
    )
    ground = bool(rng.integers(2))
    heights = Stack(layers).interfaces[1:][rng.random(len(layers)) < 0.3]
    signs = rng.choice([-1, 1], len(heights)) * 10 ** rng.uniform(1.5, 3, len(heights))
    sheets = tuple(SheetImpedance(float(h), 1j * float(x)) for h, x in zip(heights, signs, strict=True))
    return Stack(layers, ground, sheets)


def test_count_agrees_with_a_dense_scan_of_the_dispersion_function():
    """Second route: sign changes of W, real on the real x axis, for random stacks with reactive sheets."""
    rng, found = np.random.default_rng(3), 0
    for _ in range(25):
        stack = _random_stack(rng)
        for mode in ("TE", "TM"):
            dispersion = Dispersion(stack, K, mode)
            x = np.unique(np.concatenate([np.geomspace(1e-9, 20, 8000), np.linspace(1e-9, 20, 8000)]))
            w, exponent = dispersion.logarithm(x)
            signs = np.sign((w * np.exp(1j * exponent.imag)).real)
            indices = [w.beta.real for w in guided_waves(stack, K) if w.polarisation == mode]
            below = sum(b < np.sqrt(1 + 400) for b in indices)
            assert np.count_nonzero(np.diff(signs)) == below
            found += below
    assert found > 60


def test_poles_are_poles_of_the_lines():
    stack = Stack((Layer(0.12, 2.55), Layer(0.1, 6.0)), True)
    for wave in guided_waves(stack, K):
        near, far = np.abs(
            Lines(stack, K, np.array([1 + 1e-9, 1 + 1e-3]) * wave.beta.real * K, [0.2]).vi(wave.polarisation)[
                :, 0, 0
            ]
        )
        assert near > 1e5 * far


@pytest.mark.parametrize("loss", [1e-9, 1e-3, 0.05, 0.3])
def test_lossy_slab_obeys_its_equation(loss):
    """CLOSED: er p cos(kd q) = q sin(kd q), p = sqrt(b^2 - 1), at complex er."""
    (wave,) = (w for w in guided_waves(_slab(2.55, 0.19, loss), K) if w.name == "TM0")
    eps = 2.55 * (1 - 1j * loss)
    p, q = np.sqrt(wave.beta**2 - 1), np.sqrt(eps - wave.beta**2)
    x = K * 0.19 * q
    assert abs(eps * p * np.cos(x) - q * np.sin(x)) < 1e-11
    assert wave.beta.imag < 0
    assert p.real > 0


def test_small_loss_is_a_perturbation():
    exact = guided_waves(_slab(2.55, 0.19), K)[0].beta.real
    step = 1e-6
    slope = (surface_wave_index(2.55 + step, 0.19) - surface_wave_index(2.55 - step, 0.19)) / (2 * step)
    lossy = guided_waves(_slab(2.55, 0.19, 1e-5), K)[0].beta
    assert lossy.imag == pytest.approx(-2.55e-5 * slope, rel=1e-5)
    assert lossy.real == pytest.approx(exact, abs=1e-9)


def test_thick_lossy_slab_has_all_its_modes():
    stack = _slab(2.55, 6.0, 1e-3)
    lossless = [mode_count(stack, K, p) for p in ("TM", "TE")]
    waves = guided_waves(stack, K)
    assert lossless == [15, 15]
    for p, least in zip(("TM", "TE"), lossless, strict=True):
        found = [w.beta for w in waves if w.polarisation == p]
        assert len(found) >= least
        assert all(b.imag < 0 for b in found)
        assert len(set(np.round(found, 9))) == len(found)


def test_modes_that_loss_alone_binds_are_found():
    """Strong loss turns leaky waves into decaying ones the lossless count does not know."""
    stack = Stack((Layer(0.19, 2.55, 0.5), Layer(0.1, 6.0, 0.5)), True)
    waves = [w for w in guided_waves(stack, K) if w.polarisation == "TM"]
    assert len(waves) > mode_count(stack, K, "TM")
    for wave in waves:
        kt = wave.beta * K * np.array([1 + 1e-8, 1 + 1e-3])
        near, far = np.abs(Lines(stack, K, kt, [0.29]).vi("TM")[:, 0, 0])
        assert near > 1e4 * far


def test_hits_lie_on_the_circle():
    stack, lattice = _slab(2.55, 0.19), Lattice((0.6, 0.0), (0.3, 0.5))
    waves = guided_waves(stack, K)
    hits = circles_hit(waves, lattice, K, np.radians(33.0))
    assert hits
    assert [h.theta for h in hits] == sorted(h.theta for h in hits)
    for hit in hits:
        harmonic = lattice.harmonics(np.array([hit.order]), K * np.array([hit.u, hit.v]))[0]
        assert np.linalg.norm(harmonic) == pytest.approx(K * hit.wave.beta.real, rel=1e-12)
        assert np.arctan2(hit.v, hit.u) == pytest.approx(np.radians(33.0))
        assert np.hypot(hit.u, hit.v) == pytest.approx(np.sin(hit.theta))


def test_fine_lattices_are_never_hit():
    assert circles_hit(guided_waves(_slab(2.55, 0.19), K), Lattice((0.3, 0), (0, 0.3)), K, 0.0) == []


def test_wrong_wavenumber_is_refused():
    with pytest.raises(ValueError, match="k = 0 rad/m is not above zero"):
        guided_waves(_slab(2.0, 0.1), 0.0)


def test_random_lossy_stacks_with_films_meet_their_count():
    """The count itself must not depend on the size of the box it is taken in."""
    rng = np.random.default_rng(5)
    for _ in range(12):
        layers = tuple(
            Layer(
                float(10 ** rng.uniform(-3, -0.3)), float(rng.uniform(1, 10)), float(10 ** rng.uniform(-4, 0))
            )
            for _ in range(rng.integers(1, 4))
        )
        top = Stack(layers).top
        film = SheetImpedance(top, complex(10 ** rng.uniform(0, 3.5), rng.normal() * 300))
        stack = Stack(layers, bool(rng.integers(2)), (film,))
        waves = guided_waves(stack, K)  # raises unless roots and count agree
        for mode in ("TM", "TE"):
            dispersion = Dispersion(stack, K, mode)
            wide = complex(np.arcsinh(EDGE), -1.0), complex(np.arcsinh(3 * dispersion.reach), 1e-3)
            found = [w.beta for w in waves if w.polarisation == mode]
            assert _zeros_inside(dispersion, *wide) == len(found)
            assert all(0 <= -b.imag <= b.real for b in found)


def test_a_miscount_is_not_passed_over(monkeypatch):
    monkeypatch.setattr("scanward.solver.guided_waves._zeros_inside", lambda *_: 3)
    with pytest.raises(RuntimeError, match=r"1 TM surface waves of a lossy stack were found.*counts 3"):
        guided_waves(_slab(2.55, 0.1, 0.01), K)
