"""The interactive map: its numbers, that it needs no network, and a real browser that drives it."""

import base64
import json
import os
import re
import shutil
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from scanward import cases
from scanward.cases.interactive import interactive_map, plot_item
from scanward.cases.job import Limit
from scanward.cases.map_payload import GAIN_FLOOR, GAIN_STEP, MISSING, contour, map_payload, thinned
from scanward.cases.report import report_text
from scanward.geometry.lattice import Lattice
from scanward.geometry.stack import Layer, Stack
from scanward.solver.pattern import LIGHT_SPEED, co_cross, decibel
from scanward.solver.survey import Blindness, Cause, FreeCone, Peak, ScanMap, Survey
from synthetic import sheet_job, sheet_result

FREQUENCY = np.array([5.2e9, 5.4e9, 5.6e9])
HERE = np.array([0.25, -0.5])  # a direction on the grid of 33 points


def two_port_job(*, stack=None, **changes):
    """Two ports of different reference, both driven, in a cell whose grating lobes enter at the top of the band."""
    job = sheet_job(ports=2, limits=(Limit("reflection", -10.0, 1.0), Limit("reflection", -14.0, 1.0, "north")))
    east, north = job.cell.ports
    ports = (east, replace(north, drive=0.5j, resistance=75.0))
    lattice = Lattice(np.array([30e-3, 0]), np.array([0, 30e-3]))
    return replace(job, cell=replace(job.cell, ports=ports, lattice=lattice, stack=stack), **changes)


def gamma(frequency, u, v, port):
    """Reflection that depends on everything and lies within the unit circle."""
    shift = 0.2 * (frequency / 5.4e9 - 1)
    return (0.2 + 0.1 * port + shift + 0.5 * u**2 + 0.2 * v) * np.exp(1j * (1 + 2 * u - 3 * v + port))


def wave(frequency, u, v):
    """Theta and phi parts of the main wave."""
    return np.stack([(2 + u) * frequency / 5e9 + 0 * v, 0.3 * v + 0.2j + 0 * u], axis=-1)


def scan_map(n=33, frequency=FREQUENCY):
    axis = np.linspace(-1, 1, n)
    f, u, v = np.meshgrid(frequency, axis, axis, indexing="ij")
    outside = u**2 + v**2 >= 1
    reflection = np.stack([gamma(f, u, v, 0), gamma(f, u, v, 1)], axis=-1)
    field = wave(f, u, v).astype(complex)
    reflection[outside], field[outside] = np.nan, np.nan
    return ScanMap(frequency, axis, reflection, field, np.ones(f.shape, dtype=bool))


def unpacked(payload):
    """Reflection (frequency, port, v, u) and gain (frequency, part, v, u) as a reader of the file finds them."""
    n, nf, ports = len(payload["axis"]), len(payload["frequency"]), len(payload["ports"])
    bits = np.frombuffer(base64.b64decode(payload["mask"]), dtype=np.uint8)
    mask = np.unpackbits(bits)[: n * n].reshape(n, n).astype(bool)

    def numbers(entry, *shape):
        whole = np.frombuffer(base64.b64decode(entry["values"]), dtype="<i2").reshape(*shape, mask.sum())
        values = np.full((*shape, n, n), np.nan)
        values[..., mask] = np.where(whole == MISSING, np.nan, whole * entry["step"])
        return values

    parts = numbers(payload["reflection"], nf, ports, 2)
    return parts[:, :, 0] + 1j * parts[:, :, 1], numbers(payload["gain"], nf, 2)


def test_the_numbers_carried_are_those_of_the_map():
    maps, job = scan_map(), two_port_job(co_polar_angle=0.3)
    payload = map_payload(job, maps)
    reflection, gain = unpacked(payload)
    largest = np.nanmax(np.abs(maps.reflection))
    np.testing.assert_allclose(reflection, maps.reflection.transpose(0, 3, 2, 1), atol=3e-5 * largest, rtol=0)
    u, v = np.meshgrid(maps.axis, maps.axis, indexing="ij")
    for part, field in enumerate(co_cross(maps.field, np.arctan2(v, u), "x", 0.3)):
        np.testing.assert_allclose(gain[:, part].transpose(0, 2, 1), decibel(np.abs(field) ** 2), atol=0.51 * GAIN_STEP)
    assert [port["resistance"] for port in payload["ports"]] == [120.0, 75.0]
    assert [port["limit"] for port in payload["ports"]] == [-10.0, -14.0]
    assert payload["cone"] == pytest.approx(np.sin(np.radians(60)))


def test_ports_without_drive_are_left_out_and_single_holes_are_kept():
    maps, job = scan_map(), two_port_job()
    ports = (replace(job.cell.ports[0], drive=0j), job.cell.ports[1])
    maps.reflection[..., 0] = np.nan
    maps.reflection[1, 16, 20, 1] = np.nan
    maps.field[2, 16, 16] = 0
    reflection, gain = unpacked(payload := map_payload(replace(job, cell=replace(job.cell, ports=ports)), maps))
    assert [port["name"] for port in payload["ports"]] == ["north"] and reflection.shape[1] == 1
    assert np.isnan(reflection[1, 0, 20, 16]) and np.isfinite(reflection[0, 0, 20, 16])
    assert gain[2, 0, 16, 16] == GAIN_FLOOR


def test_large_maps_are_thinned_about_broadside():
    n, nf = 205, 23
    blank = np.zeros((nf, n, n, 2), dtype=complex)
    maps = ScanMap(np.linspace(5e9, 6e9, nf), np.linspace(-1, 1, n), blank, blank, np.ones((nf, n, n), dtype=bool))
    thin = thinned(maps, 2)
    assert len(thin.frequency) == 11 and thin.frequency[[0, -1]].tolist() == [5e9, 6e9]
    assert len(thin.axis) % 2 and 65 < len(thin.axis) <= 101
    assert thin.axis[len(thin.axis) // 2] == 0 and np.ptp(np.diff(thin.axis)) < 1e-12
    assert thin.reflection.shape == (*thin.solved.shape, 2) == (11, len(thin.axis), len(thin.axis), 2)
    assert len(thinned(maps, 16).axis) < len(thin.axis)  # more ports, fewer points
    assert thinned(scan_map(), 2).axis.tolist() == scan_map().axis.tolist()


def test_circles_move_with_frequency():
    stack = Stack((Layer(2.5e-3, 3.0),), ground=True)
    circles = map_payload(two_port_job(stack=stack), scan_map())["circles"]
    lobes = [[c for c in one if c[3] == "Grating lobe enters"] for one in circles]
    assert [len(one) for one in lobes] == [4, 4, 4]
    for frequency, one in zip(FREQUENCY, lobes, strict=True):
        away = LIGHT_SPEED / frequency / 30e-3  # of a square lattice: lambda / d
        assert all(np.hypot(c[0], c[1]) == pytest.approx(away, abs=2e-5) and c[2] == 1 for c in one)
        assert next(c[:2] for c in one if c[4] == "(1, 0)") == [pytest.approx(-away, abs=2e-5), 0]
    waves = [[c for c in one if c[3] == "TM0 met by Floquet wave"] for one in circles]
    radius = [one[0][2] for one in waves]
    assert all(len(one) >= 4 for one in waves) and 1 < radius[0] < radius[1] < radius[2] < np.sqrt(3)


def test_the_contour_lies_where_the_reflection_is_at_the_limit():
    maps = scan_map(65)
    reflection = maps.reflection[1, ..., 0].T
    u, v = (np.array([x for x in part if x is not None]) for part in contour(maps.axis, reflection, -10.0))
    assert len(u) > 50
    np.testing.assert_allclose(decibel(np.abs(gamma(5.4e9, u, v, 0)) ** 2), -10.0, atol=0.15)
    assert contour(maps.axis, reflection, 3.0) == [[], []] == contour(maps.axis, reflection, None)


def blindness(frequency, u, v, port=0):
    peak = Peak(frequency, u, v, port, 0.99j, 0.01, np.zeros(2), 0.0, 0.0, np.zeros(0))
    return Blindness((peak,), peak, Cause("resonance", "", (0, 0), 0.0, np.nan, 0.0, 50.0), True)


def test_peaks_are_marked_at_their_frequency_and_on_both_sides():
    peaks = map_payload(two_port_job(), scan_map(), [blindness(5.4e9, 0.3, 0.1, 1), blindness(5.5e9, 0.4, 0)])["peaks"]
    level = pytest.approx(20 * np.log10(0.99))
    assert peaks == [[], [[0.3, 0.1, 1, level], [-0.3, -0.1, 1, level]], []]


def surveyed(result):
    maps, azimuth = scan_map(), np.radians(np.arange(0, 360, 5.0))
    clear = np.full((len(FREQUENCY), len(azimuth)), 0.5)
    planes = ((0.0, 0.5), (np.pi / 2, 0.5))
    cone = FreeCone(0.1, FREQUENCY, azimuth, clear, 0.5, planes, 0.4, (5.2e9, 5.6e9), 1.0, 0.8)
    return replace(result, survey=Survey(maps, (), cone, 1e-4))


def test_the_report_holds_the_map_only_after_a_survey():
    result = sheet_result(ports=2)
    html = report_text(surveyed(result), ())
    places = [html.index(part) for part in ("<h2>Evidence", '<section class="scan-map"', "<h3>Numerical checks")]
    assert places == sorted(places) and html.count('class="scan-map"') == 1
    assert "scan-map" not in report_text(result, ())


class Addresses(HTMLParser):
    """Addresses a browser would fetch, and the text of each script element."""

    def __init__(self):
        super().__init__()
        self.found, self.scripts, self.inside = [], [], False

    def handle_starttag(self, tag, attrs):
        self.found += [value for name, value in attrs if name in ("src", "href", "srcset", "data", "poster")]
        self.inside = tag == "script"
        if self.inside:
            self.scripts.append("")

    def handle_data(self, data):
        if self.inside:
            self.scripts[-1] += data

    def handle_endtag(self, tag):
        self.inside = self.inside and tag != "script"


def test_the_fragment_names_no_address_and_is_the_same_every_time():
    maps, job = scan_map(), two_port_job()
    html = interactive_map(job, maps)
    words = Addresses()
    words.feed(html)
    assert not words.found and "@import" not in html and "url(" not in html.split("<script")[0]
    assert any(text.startswith('{"axis"') for text in words.scripts)
    assert html == interactive_map(job, maps) and plot_item() == plot_item()
    assert len(html) < 2.0e6
    assert "<noscript>" in html and re.search(r"@media print \{ \.scan-map \{ display: none", html)


def test_names_of_ports_are_escaped():
    job = two_port_job()
    ports = tuple(replace(port, name=f"</script><b>{port.name}") for port in job.cell.ports)
    words = Addresses()
    html = interactive_map(replace(job, cell=replace(job.cell, ports=ports)), scan_map())
    words.feed(html)
    data = next(json.loads(text) for text in words.scripts if text.startswith('{"axis"'))
    assert data["ports"][0]["name"] == "</script><b>east" and "<b>" not in html.split("<script")[0]


# In a real browser

FLAGS = (
    "--headless --no-sandbox --disable-gpu --disable-quic --no-first-run --disable-background-networking "
    "--disable-component-update --disable-sync --hide-scrollbars --disable-dev-shm-usage "
    "--force-device-scale-factor=1 --window-size=1000,1000"
)
ROWS = ("theta", "phi", "resistance", "reactance", "reflection", "co", "cross")
UNITS = ("°", "°", " Ω", " Ω", " dB", " dBi", " dBi")
SLACK = np.array([0.051, 0.051, 0.15, 0.15, 0.02, 0.011, 0.011])  # rounding of text and of stored numbers
POINTED, PINNED = 1, 2
NEARLY_OPEN = 0.9999 * np.exp(0.01j)  # of the second port at u = 0.9375, v = 0, middle of the band


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    """A headless browser that finds no host; skipped where none is installed, except in CI."""
    program = shutil.which("chromium") or shutil.which("chromium-browser")
    driver = shutil.which("chromedriver")
    if not (program and driver):
        reason = "no chromium and chromedriver (Debian packages chromium, chromium-driver)"
        if os.environ.get("SCANWARD_REQUIRE_BROWSER"):
            pytest.fail(reason)
        pytest.skip(reason)
    from selenium.webdriver import Chrome, ChromeOptions, ChromeService

    options = ChromeOptions()
    options.binary_location = program
    for flag in (*FLAGS.split(), f"--user-data-dir={tmp_path_factory.mktemp('browser')}"):
        options.add_argument(flag)
    options.add_argument("--host-resolver-rules=MAP * ~NOTFOUND")
    options.set_capability("goog:loggingPrefs", {"browser": "ALL"})
    chrome = Chrome(options, ChromeService(driver))
    yield chrome
    chrome.quit()


@pytest.fixture(scope="module")
def path(tmp_path_factory):
    """A page of the report's style around the map of two ports, with one peak off the grid."""
    stack = Stack((Layer(2.5e-3, 3.0),), ground=True)
    maps = scan_map()
    maps.reflection[1, 31, 16, 1] = NEARLY_OPEN
    html = interactive_map(two_port_job(stack=stack), maps, [blindness(5.6e9, 0.31, 0.2)])
    report = (Path(cases.__file__).parent / "report.html").read_text("utf-8")
    style = report[report.index("<style>") : report.index("</style>") + 8]
    target = tmp_path_factory.mktemp("map") / "page.html"
    head = f'<!DOCTYPE html><html lang="en"><meta charset="utf-8"><title>map</title>{style}'
    target.write_text(f"{head}<main>{html}</main></html>", "utf-8")
    return target


@pytest.fixture
def page(browser, path):
    """The page freshly loaded; afterwards its console must be clean."""
    from selenium.webdriver.common.actions.action_builder import ActionBuilder
    from selenium.webdriver.support.ui import WebDriverWait

    browser.get_log("browser")
    away = ActionBuilder(browser)
    away.pointer_action.move_to_location(1, 1)
    away.perform()
    browser.get(path.as_uri())
    WebDriverWait(browser, 60).until(lambda b: b.execute_script("return root().dataset.ready" + ROOT) == "yes")
    yield browser
    told = [line for line in browser.get_log("browser") if line["level"] not in ("INFO", "DEBUG")]
    assert not [line for line in told if line["source"] != "rendering"]  # but for hints how to draw faster
    fetched = browser.execute_script("return performance.getEntriesByType('resource').map(entry => entry.name)")
    assert all(name.startswith(("data:", "blob:")) for name in fetched)


ROOT = "; function root() { return document.getElementById('scan-map'); }"


def find(page, selector):
    return page.find_element("css selector", f"#scan-map {selector}")


def readout(page, column):
    """Numbers of one column of the read-out, NaN where it is empty."""
    values = []
    for row, unit in zip(ROWS, UNITS, strict=True):
        text = page.execute_script("return arguments[0].children[arguments[1]].textContent",
                                   find(page, f"[data-row={row}]"), column)  # fmt: skip
        assert not text or text.endswith(unit)
        values.append(float(text.removesuffix(unit).replace("−", "-")) if text else np.nan)
    return np.array(values)


def expected(frequency, uv, port):
    """The same numbers by the formulas the map was made of."""
    u, v = uv
    g = complex(gamma(frequency, u, v, port))
    z = (120.0, 75.0)[port] * (1 + g) / (1 - g)
    phi = np.arctan2(v, u)
    co, cross = co_cross(wave(frequency, u, v)[None].astype(complex), np.array([phi]), "x", 0.0)
    gains = [20 * np.log10(abs(part[0])) for part in (co, cross)]
    angles = [np.degrees(np.arcsin(np.hypot(u, v))), np.degrees(phi) % 360]
    return np.array([*angles, z.real, z.imag, 20 * np.log10(abs(g)), *gains])


def agree(found, wanted):
    assert np.all(np.abs(found - wanted) <= SLACK + [0, 0, 2e-4 * abs(wanted[2]), 2e-4 * abs(wanted[3]), 0, 0, 0])


def place(page, u, v):
    """Offset of a direction from the middle of the plot's element, in pixels."""
    where = """
        const view = Bokeh.index.roots[0];
        const frame = view.frame, box = view.canvas_view.el.getBoundingClientRect();
        const out = root().querySelector(".plot").getBoundingClientRect();
        return [box.left + frame.x_scale.compute(arguments[0]) - out.left - out.width / 2,
                box.top + frame.y_scale.compute(arguments[1]) - out.top - out.height / 2];
    """
    return page.execute_script(where + ROOT, u, v)


def move_to(page, u, v, *, click=False):
    from selenium.webdriver import ActionChains

    dx, dy = place(page, u, v)
    chain = ActionChains(page, duration=20).move_to_element_with_offset(find(page, ".plot"), round(dx), round(dy))
    (chain.click() if click else chain).perform()


def choose(page, selector, value):
    from selenium.webdriver.support.ui import Select

    Select(find(page, selector)).select_by_value(value)


def slide(page, steps):
    """Move the slider by its keys, as a user may."""
    find(page, ".frequency").send_keys(("\ue014" if steps > 0 else "\ue012") * abs(steps))


def shades(page):
    """Colour range of the picture drawn, and its values (v, u) between the points of the grid too."""
    low, high, values = page.execute_script("""
        const plot = Bokeh.documents[0].roots()[0], mapper = plot.select_one("mapper");
        const image = plot.select("image").find((m) => "data" in m).data.image[0];
        return [mapper.low, mapper.high, Array.from(image, (x) => (x === x ? x : null))];
    """)
    side = round(len(values) ** 0.5)
    return (low, high), np.array(values, dtype=float).reshape(side, side)


def assert_shows(values, formula):
    """The picture (v, u) is that of `formula(u, v)` (dB): exact on the grid, close between its points."""
    axis = np.linspace(-1, 1, len(values))
    v, u = np.meshgrid(axis, axis, indexing="ij")
    inside = np.hypot(u, v) < 1
    wanted = formula(u, v)
    assert np.isnan(values[np.hypot(u, v) > 1]).all()
    np.testing.assert_allclose(values[::4, ::4][inside[::4, ::4]], wanted[::4, ::4][inside[::4, ::4]], atol=0.02)
    middle = np.hypot(u, v) < 0.9
    assert np.median(np.abs(values - wanted)[middle]) < 0.02


def drawn(page, name):
    """Points (n, 2) of a set of lines or markers, NaN between pieces."""
    data = page.execute_script(
        """const data = Bokeh.documents[0].roots()[0].select(arguments[0]).find((m) => "data" in m).data;
        return [data.x, data.y].map((part) => Array.from(part, (x) => (x === x ? x : null)));""",
        name,
    )
    return np.array(data, dtype=float).T


@pytest.mark.browser
def test_pointing_at_a_direction_reads_its_numbers(page):
    agree(readout(page, PINNED), expected(5.4e9, (0, 0), 0))
    assert np.isnan(readout(page, POINTED)).all()
    move_to(page, *HERE)
    agree(readout(page, POINTED), expected(5.4e9, HERE, 0))
    move_to(page, -0.875, 0.125)
    agree(readout(page, POINTED), expected(5.4e9, (-0.875, 0.125), 0))
    move_to(page, 0.95, 0.95)  # invisible
    assert np.isnan(readout(page, POINTED)).all()


@pytest.mark.browser
def test_impedance_near_an_open_circuit_has_no_more_digits_than_it_deserves(page):
    choose(page, ".port", "1")
    move_to(page, 0.9375, 0)
    found = readout(page, POINTED)[2:4]
    z = 75 * (1 + NEARLY_OPEN) / (1 - NEARLY_OPEN)
    assert np.all(found % 100 == 0)  # a step of 3e-5 in Gamma is 46 ohm here
    assert np.all(np.abs(found - [z.real, z.imag]) <= 100) and found[1] > 1e4


@pytest.mark.browser
def test_slider_quantity_and_port_change_what_is_shown(page):
    move_to(page, *HERE, click=True)
    agree(readout(page, PINNED), expected(5.4e9, HERE, 0))
    assert shades(page)[0] == (-30, 0)
    assert_shows(shades(page)[1], lambda u, v: decibel(np.abs(gamma(5.4e9, u, v, 0)) ** 2))
    slide(page, 1)
    assert find(page, ".hertz").text == "5.6 GHz"
    agree(readout(page, PINNED), expected(5.6e9, HERE, 0))
    assert shades(page)[0] == (-30, 0)
    slide(page, -2)
    assert find(page, ".hertz").text == "5.2 GHz"
    agree(readout(page, PINNED), expected(5.2e9, HERE, 0))
    choose(page, ".port", "1")
    agree(readout(page, PINNED), expected(5.2e9, HERE, 1))
    assert_shows(shades(page)[1], lambda u, v: decibel(np.abs(gamma(5.2e9, u, v, 1)) ** 2))
    for part, name in enumerate(("co", "cross")):
        choose(page, ".quantity", name)
        (low, high), values = shades(page)
        assert low < np.nanmedian(values) < high

        def gain(u, v, part=part):
            return decibel(np.abs(co_cross(wave(5.2e9, u, v).astype(complex), np.arctan2(v, u), "x", 0.0)[part]) ** 2)

        assert_shows(values, gain)


@pytest.mark.browser
def test_circles_contour_and_peaks_follow_the_slider(page):
    for steps, frequency in ((-1, 5.2e9), (2, 5.6e9)):
        slide(page, steps)
        away = LIGHT_SPEED / frequency / 30e-3
        lobes = drawn(page, "lobes")
        lobes = lobes[np.isfinite(lobes[:, 0])]
        centres = away * np.array([[1, 0], [-1, 0], [0, 1], [0, -1]])
        nearest = np.abs(np.linalg.norm(lobes[:, None] - centres, axis=-1) - 1).min(axis=1)
        assert len(lobes) > 100 and nearest.max() < 1e-4 and np.hypot(*lobes.T).max() < 1 + 1e-6
        u, v = drawn(page, "contour").T
        level = 20 * np.log10(np.abs(gamma(frequency, u, v, 0)))
        assert np.nanmax(np.abs(level + 10)) < 0.4
    assert len(drawn(page, "waves")) > 1000 and "TM0 met by Floquet wave: (" in find(page, ".circles").text
    np.testing.assert_allclose(drawn(page, "peaks"), [[0.31, 0.2], [-0.31, -0.2]])
    assert "Peaks: −0.09 dB at θ 21.6°, φ 32.8°; −0.09 dB at θ 21.6°, φ 212.8°" in find(page, ".circles").text
    np.testing.assert_allclose(np.hypot(*drawn(page, "cone")[:-1].T), np.sin(np.radians(60)))


@pytest.mark.browser
def test_keys_button_and_touch_move_the_pin(page):
    from selenium.webdriver.common.actions.action_builder import ActionBuilder
    from selenium.webdriver.common.actions.pointer_input import PointerInput

    move_to(page, 0, 0, click=True)
    find(page, ".plot").send_keys("\ue014\ue014\ue013")  # right, right, up
    agree(readout(page, PINNED), expected(5.4e9, (0.125, 0.0625), 0))
    assert find(page, ".spoken").get_attribute("textContent").startswith("Pinned: theta 8.0°, phi 26.6°, impedance")
    find(page, ".worst").click()
    maps = scan_map()
    u, v = np.meshgrid(maps.axis, maps.axis, indexing="ij")
    level = np.where(np.hypot(u, v) <= np.sin(np.radians(60)), np.abs(maps.reflection[1, ..., 0]), 0)
    i, j = np.unravel_index(np.argmax(level), level.shape)
    found = readout(page, PINNED)
    assert found[4] == pytest.approx(20 * np.log10(level[i, j]), abs=0.02)
    dx, dy = place(page, *HERE)
    middle = page.execute_script(
        "const b = arguments[0].getBoundingClientRect(); return [b.left + b.width / 2, b.top + b.height / 2]",
        find(page, ".plot"),
    )
    finger = ActionBuilder(page, mouse=PointerInput("touch", "finger"))
    finger.pointer_action.move_to_location(round(middle[0] + dx), round(middle[1] + dy)).pointer_down().pointer_up()
    finger.perform()
    agree(readout(page, PINNED), expected(5.4e9, HERE, 0))


@pytest.mark.browser
def test_the_picture_is_painted_and_print_hides_it(page):
    choose(page, ".quantity", "reflection")
    picture = find(page, ".plot").screenshot_as_png
    pixels = read_png(picture)
    dx, dy = place(page, *HERE)
    row, column = round(pixels.shape[0] / 2 + dy), round(pixels.shape[1] / 2 + dx)
    level = 20 * np.log10(abs(gamma(5.4e9, *HERE, 0)))
    wanted = cividis((level + 30) / 30)
    assert np.abs(pixels[row - 2 : row + 3, column - 2 : column + 3, :3] - wanted).max() < 0.02
    page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    try:
        assert not page.find_element("id", "scan-map").is_displayed()
    finally:
        page.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})
    assert page.find_element("id", "scan-map").is_displayed()


def read_png(data):
    import io

    from matplotlib.image import imread

    return imread(io.BytesIO(data))


def cividis(x):
    import matplotlib

    return matplotlib.colormaps["cividis"](x)[:3]
