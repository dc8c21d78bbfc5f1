import itertools
import re
import subprocess
import sys
from collections import Counter
from dataclasses import replace
from html.parser import HTMLParser

import pytest

from fathomline.report import render_report
from report_support import renamed, small_measurement

VOID = {"meta", "link", "br", "hr", "img", "input", "wbr"}
HOSTILE = "<script>alert(1)</script>&\"'"


@pytest.fixture(scope="module")
def measurement(tmp_path_factory):
    return small_measurement(tmp_path_factory.mktemp("report"))


@pytest.fixture(scope="module")
def page(measurement):
    return render_report(measurement, command="fathomline measure test.toml")


class Balance(HTMLParser):
    """Collects tags, attributes and text, and every tag that does not close its partner."""

    def __init__(self, text):
        super().__init__()
        self.open, self.faults, self.tags = [], [], []
        self.attributes = []
        self.text = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += [(tag, name, value) for name, value in attrs]
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += [(tag, name, value) for name, value in attrs]

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.faults.append((tag, self.getpos()))

    def handle_data(self, data):
        self.text.append(data)


def test_tags_are_balanced_and_headings_in_order(page):
    parsed = Balance(page)
    assert parsed.faults == []
    assert parsed.open == []
    assert parsed.tags.count("h1") == 1
    levels = [int(tag[1]) for tag in parsed.tags if re.fullmatch("h[1-6]", tag)]
    assert all(b - a <= 1 for a, b in itertools.pairwise(levels))


def test_tables_can_be_read_aloud(page):
    parsed = Balance(page)
    assert parsed.tags.count("table") == parsed.tags.count("caption") >= 4
    scopes = [value for tag, name, value in parsed.attributes if (tag, name) == ("th", "scope")]
    assert len(scopes) == parsed.tags.count("th")
    svgs = [value for tag, name, value in parsed.attributes if (tag, name) == ("svg", "aria-label")]
    assert len(svgs) == parsed.tags.count("svg") >= 2
    assert all(len(label) > 40 for label in svgs)


def test_the_page_loads_nothing_and_runs_nothing(page):
    parsed = Balance(page)
    assert not {"script", "iframe", "link", "img", "object", "embed"} & set(parsed.tags)
    for _, name, value in parsed.attributes:
        assert not name.startswith("on")
        if name in ("src", "href", "xlink:href", "action", "srcset"):
            assert value.startswith("#")
    assert "http" not in page
    assert "@import" not in page
    assert set(re.findall(r"url\((.)", page)) <= {"#"}


def test_ids_are_unique_and_every_reference_has_its_target(page):
    parsed = Balance(page)
    ids = Counter(value for _, name, value in parsed.attributes if name == "id")
    assert [name for name, count in ids.items() if count > 1] == []
    wanted = {value[1:] for _, name, value in parsed.attributes if name == "href"}
    wanted |= set(re.findall(r"url\(#([^)]*)\)", page))
    wanted |= {value for _, name, value in parsed.attributes if name == "aria-labelledby"}
    assert wanted <= set(ids)


def test_a_hostile_name_stays_text(measurement):
    text = render_report(renamed(measurement, HOSTILE), command=HOSTILE)
    assert "<script" not in text
    parsed = Balance(text)
    assert parsed.faults == []
    assert "script" not in parsed.tags
    assert "".join(parsed.text).count(HOSTILE) >= 3  # title, heading, command
    labels = [v for tag, name, v in parsed.attributes if (tag, name) == ("svg", "aria-label")]
    assert any(HOSTILE in label for label in labels)


def test_the_page_is_the_same_each_time_and_small(measurement, page):
    assert render_report(measurement, command="fathomline measure test.toml") == page
    assert len(page.encode()) < 1_500_000


def test_the_page_says_what_a_reader_needs(measurement, page):
    text = " ".join("".join(Balance(page).text).split())
    assert "no systematic error budget" in text
    assert f"χ²/ν = {measurement.fit.chi2_nu:.3f}" in text
    for name in ("Fe II 2374", "Mg II 2803", "one.fits", "two.fits", measurement.digest):
        assert name in text
    for version in measurement.versions().values():
        assert version in text
    for spectrum in measurement.built.spectra:
        assert spectrum.reading.file_digest in text
        assert all(guess in text for guess in spectrum.reading.guesses)
    assert "fathomline measure test.toml" in text
    assert "Nave 2012" in text  # a source of the Fe II wavenumbers
    assert "fixed" in text
    assert "tied to component[1].b" in text
    assert "returned" in text


def test_the_folder_of_the_spectrum_stays_private(measurement, page):
    assert str(measurement.job.spectrum_path(0).parent) not in page


def test_a_missing_error_has_its_reason(measurement):
    covariance = measurement.fit.covariance
    reasons = {"alpha.dalpha": "singular", "component[1].velocity": "at bound"}
    fit = replace(
        measurement.fit,
        covariance=replace(covariance, reasons=reasons),
        flags=("no-error", "at-bound"),
    )
    text = " ".join("".join(Balance(render_report(replace(measurement, fit=fit))).text).split())
    assert "No statistical error" in text
    assert "no error: at bound" in text
    assert "not trustworthy" in text
    assert "the data do not constrain it alone" in text
    assert "a component parameter lies at a bound" in text


def test_a_column_density_without_a_measurement_keeps_its_digits(measurement):
    covariance = measurement.fit.covariance
    i = covariance.names.index('component[4].logN["Fe II"]')
    matrix = covariance.matrix.copy()
    matrix[i, i] = 1.2e4**2
    fit = replace(measurement.fit, covariance=replace(covariance, matrix=matrix))
    text = render_report(replace(measurement, fit=fit))
    assert "error 12000 dex: not constrained" in text
    assert f"{fit.values[covariance.names[i]]:.2f}" in text


def test_a_fit_without_restarts_does_not_claim_convergence(measurement):
    fit = replace(measurement.fit, restarts=())
    text = render_report(replace(measurement, fit=fit))
    assert "No restart was asked for" in text
    assert "every restart came back" not in text


def test_warnings_are_shown(measurement):
    text = render_report(replace(measurement, warnings=["one: 3 pixels <odd>"]))
    assert "one: 3 pixels &lt;odd&gt;" in text


def test_importing_the_report_imports_no_plotting():
    code = (
        "import sys, fathomline.report; print('matplotlib' in sys.modules, 'jinja2' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["False", "False"]
