"""Layers and sheets of a case file: the stack, the mesh beside it, what is told of it, and how near a sheet may be."""

import io
import tomllib
from dataclasses import replace

import numpy as np
import pytest
from bad_case_layers import LAYERS, PRINTED
from scanward.cases.check import show_check
from scanward.cases.layers import layer_rows, stack_summary
from scanward.cases.quantity import SPEED_OF_LIGHT
from scanward.cases.read import parse_case
from scanward.geometry.errors import InputError
from scanward.geometry.stack import Layer, SheetImpedance, Stack
from scanward.solver.result import ScanPoints
from scanward.solver.sweep import solve_sweep

SIZE = SPEED_OF_LIGHT / 5.8e9 / 20  # of elements in air, where [mesh] says nothing
FILM = '[[sheet]]\nname = "film"\non = "foam"\nreactance = "-200 ohm"\n'


def longest_edge(cell):
    corners = cell.mesh.points[cell.mesh.triangles]
    return np.linalg.norm(corners - np.roll(corners, 1, axis=1), axis=2).max()


def test_the_stack_is_that_of_the_tables():
    film = SheetImpedance(7.2e-3, -200j, "film")
    layers = (Layer(3.2e-3, 2.2, 0.001, name="base"), Layer(4e-3, 1.06, name="foam"))
    job = parse_case(PRINTED)
    stack = job.cell.stack
    assert stack is not None and stack.layers == layers and stack.ground
    assert stack.sheets[0].height == pytest.approx(film.height, rel=1e-12)
    assert stack.sheets[0].impedance == film.impedance
    assert not parse_case(PRINTED.replace("ground = true", "ground = false")).cell.stack.ground
    assert parse_case(PRINTED.replace(LAYERS, "")).cell.stack is None
    assert job.remesh(0.7).stack == stack and len(job.remesh(0.7).mesh.points) > len(job.cell.mesh.points)


def test_the_resolved_text_is_the_same_case():
    job = parse_case(PRINTED)
    again = parse_case(job.text)
    assert again.text == job.text and again.cell.stack == job.cell.stack
    np.testing.assert_array_equal(again.cell.mesh.points, job.cell.mesh.points)


def test_an_air_layer_stays_in_the_case():
    text = PRINTED.replace(LAYERS, '[[layer]]\nname = "spacer"\nthickness = "3.2 mm"\npermittivity = 1\n')
    assert parse_case(parse_case(text).text).cell.stack == Stack((Layer(3.2e-3, 1.0, name="spacer"),), True)


@pytest.mark.parametrize(
    ("old", "new", "size"),
    [
        ("", "", SIZE / np.sqrt((2.2 + 1.06) / 2)),  # on the interface: the mean of both sides
        ('"3.2 mm"]', '"2 mm"]', SIZE / np.sqrt(2.2)),
        ('"3.2 mm"]', '"20 mm"]', SIZE),
        ("permittivity = 2.2", "permittivity = 9.8", SIZE / np.sqrt((9.8 + 1.06) / 2)),
        ('name = "dipole"\n', 'name = "dipole"\nelement_size = "4 mm"\n', 4e-3),
        ("[[layer]]\nname = \"base\"", "[mesh]\nelement_size = \"4 mm\"\n[[layer]]\nname = \"base\"", 4e-3),
    ],
)  # fmt: skip
def test_elements_follow_the_medium_beside_them(old, new, size):
    job = parse_case(PRINTED.replace(old, new) if old else PRINTED)
    resolved = tomllib.loads(job.text)
    given = resolved["conductor"][0].get("element_size", resolved["mesh"]["element_size"])
    assert float(given.removesuffix(" m")) == pytest.approx(size, rel=1e-9)
    assert 0.5 * size < longest_edge(job.cell) < 1.5 * size  # finer beside edges and the gap


def test_a_thin_substrate_asks_for_no_finer_mesh():
    thick, thin = (parse_case(PRINTED.replace('"3.2 mm"', f'"{t} mm"')) for t in (3.2, 0.28))
    assert len(thin.cell.mesh.triangles) == len(thick.cell.mesh.triangles)


def test_what_a_ready_made_case_expects_of_its_limits():
    assert not parse_case(PRINTED).expected_to_fail
    text = PRINTED.replace("ground = true", 'ground = true\nexpected_verdict = "failed"')
    assert parse_case(text).expected_to_fail and parse_case(parse_case(text).text).expected_to_fail


def test_words_for_layers_and_sheets():
    stack = Stack(
        (Layer(1e-3, 2.2, 1e-3, name="base"), Layer(2e-3, 1, permeability=1.5)), True, (SheetImpedance(3e-3, 5 - 2j),)
    )
    assert layer_rows(stack) == [
        ("layer 2", "1 to 3 mm", "permittivity 1, permeability 1.5", "tan δ = 0"),
        ("base", "0 to 1 mm", "permittivity 2.2", "tan δ = 0.001"),
        ("sheet 1", "3 mm", "5 − j 2 ohm per square", ""),
    ]
    told = stack_summary(stack)
    assert told == "ground | base 1 mm (permittivity 2.2) | layer 2 2 mm (permittivity 1) | air; 1 sheet"
    assert stack_summary(Stack((Layer(1e-3, 2.2),))) == "air | layer 1 1 mm (permittivity 2.2) | air"


def test_check_prints_stack_and_surface_waves():
    from rich.console import Console

    stream = io.StringIO()
    show_check(parse_case(PRINTED), Console(file=stream, width=200))
    text = " ".join(stream.getvalue().split())
    for words in ("Stack, top to bottom", "base 0 to 3.2 mm permittivity 2.2 tan δ = 0.001", "TM0 5 GHz", "TE1 5.8 GHz",
                  "0 − j 200 ohm per square", "first met over all phi", "(inside the scan cone)"):  # fmt: skip
        assert words in text


def near_sheet(gap, impedance):
    return PRINTED.replace('on = "foam"', f'height = "{3.2 + gap} mm"').replace('reactance = "-200 ohm"', impedance)


@pytest.fixture(scope="module")
def least():
    """Distance in mm that the message allows."""
    with pytest.raises(InputError, match=r"is 0\.5 mm away from the sheet.*Allowed: at least [\d.]+ mm") as caught:
        parse_case(near_sheet(0.5, 'resistance = "300 ohm"'))
    return float(caught.value.allowed.split()[2])


def test_a_sheet_may_come_as_near_as_the_message_says(least):
    parse_case(near_sheet(1.001 * least, 'resistance = "300 ohm"'))
    with pytest.raises(InputError, match="away from the sheet"):
        parse_case(near_sheet(0.999 * least, 'resistance = "300 ohm"'))


def test_a_sheet_that_near_is_solved_well(least):
    """CLOSED: a sheet of 1e6 ohm is as good as none, to 0.03 % of the impedance at the nearest distance allowed."""
    job = parse_case(near_sheet(1.001 * least, 'resistance = "1e6 ohm"'))
    bare = replace(job.cell, stack=Stack(job.cell.stack.layers, True))
    scan = ScanPoints.from_angles(np.radians([0.0, 40.0]), np.radians([0.0, 30.0]))
    with_sheet, without = (solve_sweep(cell, job.frequency[-1:], scan).impedance for cell in (job.cell, bare))
    np.testing.assert_allclose(with_sheet, without, rtol=3e-4)
