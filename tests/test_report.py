"""Pictures and the report page: verdict first, nothing from the network, names from outside escaped."""

import re
from datetime import date
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pytest

from darkedge.analysis.captures import Conditions, Kind
from darkedge.analysis.decide.results import Wish
from darkedge.analysis.explain import choose_for_devices, explain_devices
from darkedge.analysis.files.intake import Intake, take_in
from darkedge.analysis.files.limits_file import read_limits
from darkedge.analysis.flags import REGISTRY
from darkedge.analysis.measurement import Measurement
from darkedge.analysis.pictures.build import build_report
from darkedge.analysis.pictures.device import choice_figures, fit_figures
from darkedge.analysis.pictures.report import ReportContent, render_report
from darkedge.analysis.pictures.saving import safe_name
from darkedge.analysis.pictures.waveforms import plot_capture, thinned
from darkedge.analysis.waveform.marks import mark_capture

SAMPLES = Path(__file__).resolve().parents[1] / "sample_captures"
PATHS = [SAMPLES / name for name in ("photodiode", "dark_traces", "lot_K-0417")]


@pytest.fixture(scope="module")
def intake() -> Intake:
    return take_in(PATHS, today=date(2026, 3, 10))


@pytest.fixture(scope="module")
def content(intake: Intake) -> ReportContent:
    return build_report(intake, paths=PATHS, made="2026-03-10", limits=read_limits(SAMPLES / "limits.toml"))


@pytest.fixture(scope="module")
def page(content: ReportContent) -> str:
    return render_report(content)


def text_of(page: str) -> str:
    return re.sub(r"<style>.*?</style>|<[^>]+>", " ", page, flags=re.DOTALL)


def test_the_verdict_stands_before_everything_else(page: str) -> None:
    text = text_of(page.split("<main>")[1])
    assert text.index("fail") < text.index("Waveforms") < text.index("Measurements")
    assert re.search(r"Lot K-0417: 6 pass, 2 fail, 0 undecided", text)


def test_the_page_needs_no_network(page: str) -> None:
    outside = re.findall(r"(?:src|href)=\"(?!data:)([^\"]*)\"|url\(|@import|<script|<link", page)
    assert outside == []
    assert len(page) < 3e6


def test_every_flag_that_came_up_is_explained(content: ReportContent, page: str) -> None:
    for code in {flag for m in content.measurements for flag in m.flags}:
        assert REGISTRY[code].sentence in page.replace("&#39;", "'")


def test_every_picture_has_words_for_those_who_cannot_see_it(page: str) -> None:
    pictures = re.findall(r"<img [^>]*>", page)
    assert len(pictures) > 10
    assert all(re.search(r'alt="[^"]{10,}"', p) for p in pictures)


def test_no_number_is_nan(page: str) -> None:
    assert not re.search(r"\bnan\b", text_of(page), re.IGNORECASE)


def test_names_from_outside_are_escaped(content: ReportContent) -> None:
    evil = "<script>alert(1)</script>"
    row = Measurement(capture=evil, element=1, conditions=Conditions(kind=Kind.PULSE, device=evil))
    hostile = ReportContent(
        title=evil,
        made="now",
        version="0",
        sources=(evil,),
        measurements=(row,),
        refusals=((evil, evil),),
        fit_errors=(evil,),
    )
    assert "<script" not in render_report(hostile)


def test_a_page_without_limits_fits_or_captures_still_says_what_there_is() -> None:
    text = text_of(render_report(ReportContent(title="t", made="now", version="0", sources=("x",), measurements=())))
    assert "No limits were given" in text


def test_cautions_of_the_plans_are_on_the_page(page: str) -> None:
    assert "invisible and the eye does not turn away" in page


def test_fit_pictures_have_labelled_axes_with_units_and_a_residual_panel(intake: Intake) -> None:
    rows = [m for m in intake.measurements if m.conditions.device == "SP-2-21"]
    figures = fit_figures(explain_devices(rows, fixture_for=intake.fixture_for).devices)
    for name, figure in figures.items():
        assert figure.axes[-1].get_xlabel(), name
        assert all(axis.get_ylabel() for axis in figure.axes), name
    edges = next(f for n, f in figures.items() if n.endswith("edges"))
    assert "residual" in edges.axes[1].get_ylabel()
    assert edges.axes[0].yaxis.get_major_formatter().unit == "s"


def test_the_choice_is_drawn_with_its_best_pair(intake: Intake) -> None:
    rows = [m for m in intake.measurements if m.conditions.device == "SP-2-21"]
    choices = choose_for_devices(rows, wish=Wish(pulse_width_s=1e-6), fixture_for=intake.fixture_for).choices
    (figure,) = choice_figures(choices).values()
    assert any("best:" in t.get_text() for t in figure.axes[0].texts)


def test_drawing_changes_no_global_setting(intake: Intake) -> None:
    before = dict(mpl.rcParams)
    capture = intake.reread(next(n for n in intake.sources if n.endswith("_pulse.csv")))
    plot_capture(capture, mark_capture(capture, element=1), element=1)
    assert dict(mpl.rcParams) == before


def test_a_capture_without_a_pulse_is_drawn_and_says_so(intake: Intake) -> None:
    name = next(n for n in intake.sources if n.endswith("_dark.csv"))
    capture = intake.reread(name)
    figure = plot_capture(capture, mark_capture(capture, element=1), element=1)
    assert any("no pulse" in t.get_text() for t in figure.axes[-1].texts)


def test_a_long_capture_is_drawn_by_its_outline() -> None:
    time = np.linspace(0, 1, 100_000)
    signal = np.sin(2 * np.pi * 3 * time)
    signal[54_321] = 9.0
    drawn_time, drawn = thinned(time, signal)
    assert drawn.size <= 1500
    assert drawn.max() == 9.0
    assert np.all(np.diff(drawn_time) > 0)


def test_file_names_of_pictures_are_safe() -> None:
    assert safe_name("lot/../K 0417: edges") == "lot_.._K_0417_edges"
    assert safe_name("???") == "plot"
