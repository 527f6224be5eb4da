"""The report: verdict first, self-contained, escaped, honest about what is missing."""

import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest
from scanward.cases.expect import compare
from scanward.cases.figures import draw_all
from scanward.cases.job import Expectation, Limit
from scanward.cases.judge import judge
from scanward.cases.report import headline, report_text, tone, write_report
from scanward.cases.result import Accuracy
from synthetic import sheet_result

CONE = np.radians(60)


class Words(HTMLParser):
    """Visible text in order, tag balance, and every address that a browser would fetch."""

    VOID = ("meta", "img", "br", "link")

    def __init__(self):
        super().__init__()
        self.text, self.open, self.sources = [], [], []

    def handle_starttag(self, tag, attrs):
        if tag not in self.VOID:
            self.open.append(tag)
        self.sources += [value for name, value in attrs if name in ("src", "href")]

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if self.open and self.open[-1] != "style":
            self.text.append(data)


def read(text):
    words = Words()
    words.feed(text)
    assert not words.open
    return " ".join(" ".join(words.text).split()), words


def with_limits(*limits, **kwargs):
    return sheet_result(limits=tuple(limits), **kwargs)


def test_report_opens_with_the_verdict_then_evidence_then_cautions():
    result = with_limits(Limit("reflection", -10.0, CONE), Limit("gain_drop", 5.0, CONE), loss=2.0)
    text, words = read(report_text(result, draw_all(result)))
    places = [
        text.index(part)
        for part in ("1 of 2 limits is not met", "Active reflection at most -10.00 dB", "theta 60 deg",
                     "Evidence", "Cautions", "can destroy transmitters", "ICNIRP", "C95.1", "Conventions")
    ]  # fmt: skip
    assert places == sorted(places)
    assert sum(source.startswith("data:image/") for source in words.sources) == 9
    assert all(source.startswith("data:") for source in words.sources)


def test_nothing_is_fetched_from_a_network():
    html = report_text(sheet_result(), ())
    assert not re.search(r"(src|href|url\()\s*=?\s*[\"']?(https?:)?//", html) and "<script" not in html


def test_what_the_user_wrote_is_escaped():
    result = sheet_result()
    nasty = replace(result.job, title="<script>alert(1)</script>", text="a = '<b>&'\n")
    html = report_text(replace(result, job=nasty), ())
    assert "<script>" not in html and "&lt;script&gt;" in html and "&lt;b&gt;&amp;" in html


@pytest.mark.parametrize(
    ("value", "words", "colour"),
    [
        (-3.0, "The limit is met.", "met"),
        (-12.0, "1 of 1 limit is not met.", "failed"),
        (-7.5, "too close", "close"),
    ],
)
def test_headline(value, words, colour):
    result = with_limits(Limit("reflection", value, CONE))
    verdicts = judge(result)
    assert words in headline(result, verdicts) and tone(result, verdicts) == colour


def test_a_failed_computation_is_said_before_anything_else():
    result = replace(sheet_result(), failure="the power balance is off by 0.2")
    text, _ = read(report_text(result, ()))
    assert "did not reach its tolerance" in text
    assert text.index("do not use these numbers") < text.index("Active reflection")
    assert "power balance is off by 0.2" in text


def test_no_limits_and_no_estimate_are_said():
    result = replace(
        with_limits(), accuracy=Accuracy(note="the finer mesh would need about 99.0 GB of memory")
    )
    text, _ = read(report_text(result, ()))
    assert "nothing was judged" in text and "was not estimated : the finer mesh would need" in text


def test_expectations_are_compared():
    result = sheet_result()
    f, theta = 5.4e9, np.radians(30)
    job = replace(
        result.job,
        expect=(
            Expectation("resistance", 120 * np.cos(theta), 0.1, "closed form", f, theta, 0.0),
            Expectation("reflection", 0.0, 0.1, "wrong on purpose", f, theta, 0.0),
            Expectation("gain", 0.0, 0.1, "no such direction", f, 0.111, 0.0),
            Expectation("efficiency", 1.0, 1e-9, "lossless", f, theta, 0.0, "east"),
        ),
    )
    result = replace(result, job=job)
    assert [item.agrees for item in compare(result)] == [True, False, False, True]
    text, _ = read(report_text(result, ()))
    assert "103.9 ohm agrees closed form" in text and "not in this run" in text


def test_an_old_report_survives_a_failed_write(tmp_path, monkeypatch):
    path = tmp_path / "report.html"
    write_report(path, sheet_result(), ())
    before = path.read_bytes()
    monkeypatch.setattr("os.replace", lambda *_: (_ for _ in ()).throw(OSError("disk full")))
    with pytest.raises(OSError, match="disk full"):
        write_report(path, sheet_result(), ())
    assert path.read_bytes() == before and len(list(tmp_path.iterdir())) == 1
