"""Pictures and the page with content that is empty, hostile, one-sided or large."""

import base64
import html
import re
import warnings

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.figure import Figure

from darkedge.analysis.captures import Capture, Conditions, DeviceKind, Edge, Kind, Waveform
from darkedge.analysis.dark.results import DarkFit, DarkPoint
from darkedge.analysis.decide.results import Choice, Limit, Limits, OperatingPoint, Wish
from darkedge.analysis.decide.verdicts import screen
from darkedge.analysis.flags import REGISTRY
from darkedge.analysis.junction.results import PulseWidthPoint, ShortestPulse
from darkedge.analysis.measurement import Estimate, Measurement
from darkedge.analysis.pictures.choice import plot_choice
from darkedge.analysis.pictures.lots import plot_limit
from darkedge.analysis.pictures.report import ReportContent, WaveformPicture, render_report
from darkedge.analysis.pictures.saving import as_data_uri
from darkedge.analysis.pictures.trends import plot_dark_current, plot_pulse_widths, plot_times
from darkedge.analysis.pictures.waveforms import plot_capture, plot_dark_trace
from darkedge.analysis.waveform.marks import ChannelMarks, Crossing, Marks

HOSTILE = "<script>alert('x')</script> & $\\frac{1}$ \x1b[31m \u202e \udce9 部品"


def page(**more: object) -> str:
    base: dict[str, object] = {"title": "t", "made": "now", "version": "0", "sources": ("x",), "measurements": ()}
    return render_report(ReportContent(**(base | more)))  # type: ignore[arg-type]


def text_of(source: str) -> str:
    return html.unescape(re.sub(r"<style>.*?</style>|<[^>]+>", " ", source, flags=re.DOTALL))


def svg_of(figure: Figure) -> str:
    return base64.b64decode(as_data_uri(figure).split(",")[1]).decode("utf-8")


def pulse_capture(device: str = "SP-2-01") -> tuple[Capture, Marks]:
    time = np.arange(-1e-6, 3e-6, 1e-8)
    drive = np.where((time > 0) & (time < 1e-6), 2.0, 0.0)
    on, off = np.clip(time, 0, 1e-6), np.clip(time - 1e-6, 0, None)
    signal = (1 - np.exp(-on / 5e-8)) * np.exp(-off / 5e-8)
    conditions = Conditions(device=device, kind=Kind.PULSE, bias_V=12.0, load_ohm=1000.0)
    capture = Capture(
        name="a.csv",
        drive=Waveform(signal_V=drive, dt_s=1e-8, t0_s=-1e-6),
        outputs={1: Waveform(signal_V=signal, dt_s=1e-8, t0_s=-1e-6)},
        conditions=conditions,
    )
    points = [
        Crossing(time_s=start - 5e-8 * float(np.log(1 - step)), level_V=level, fraction=level, edge=edge)
        for start, edge in ((0.0, Edge.RISING), (1e-6, Edge.FALLING))
        for step in (0.1, 0.5, 0.9)
        for level in (step if edge is Edge.RISING else 1 - step,)
    ]
    middles = tuple(
        Crossing(time_s=t, level_V=1.0, fraction=0.5, edge=edge)
        for t, edge in ((0.0, Edge.RISING), (1e-6, Edge.FALLING))
    )
    return capture, Marks(
        output=ChannelMarks(low_V=0.0, high_V=1.0, crossings=tuple(points)),
        drive=ChannelMarks(low_V=0.0, high_V=2.0, crossings=middles),
    )


def row(device: str, rise_s: float, *, bias_V: float = 12.0, flags: tuple[str, ...] = ()) -> Measurement:
    return Measurement(
        capture=f"lot/{device}/captures/{bias_V:g}.csv",
        element=1,
        conditions=Conditions(device=device, lot="K-0417", kind=Kind.PULSE, bias_V=bias_V, load_ohm=1000.0),
        quantities={"rise_time_s": Estimate(value=rise_s, u=1e-9)},
        flags=flags,
    )


LIMITS = Limits(limits=(Limit(quantity="rise_time_s", upper=110e-9, when={"bias_V": 12.0}),))


def test_an_edge_is_written_with_its_time_and_its_delay_from_the_marks() -> None:
    """RC response: 10 to 90 % takes ln 9 time constants, the half ln 2 of one; 50 ns here."""
    capture, marks = pulse_capture()
    figure = plot_capture(capture, marks)
    titles = [axes.get_title(loc="left") for axes in figure.axes]
    assert "rise 109.9 ns\ntPLH 34.66 ns" in titles
    assert "fall 109.9 ns\ntPHL 34.66 ns" in titles


def test_what_was_measured_is_written_with_its_uncertainty_and_what_was_not_is_said() -> None:
    capture, marks = pulse_capture()
    measured = row("SP-2-01", 100e-9)
    titles = [axes.get_title(loc="left") for axes in plot_capture(capture, marks, measured=measured).axes]
    assert any("rise 100.0(1.0) ns" in t for t in titles)
    assert any("fall not measured" in t for t in titles)


def test_every_axis_says_its_quantity_and_a_unit() -> None:
    """On a linear axis the unit stands in the label, on a logarithmic one at the numbers."""
    capture, marks = pulse_capture()
    fit = DarkFit(device="d", element=1, points=tuple(
        DarkPoint(bias_V=b, current_A=Estimate(value=1e-9 * b, u=1e-11)) for b in (1.0, 5.0, 12.0)
    ))  # fmt: skip
    rows = [row("SP-2-01", 1e-7 / b, bias_V=b) for b in (1.0, 5.0, 12.0)]
    times = plot_times(rows, "bias_V", ("rise_time_s",), "t")
    assert times is not None
    for figure in (plot_capture(capture, marks), plot_dark_trace(capture), plot_dark_current(fit, "t"), times):
        for axes in figure.axes:
            for axis in (axes.xaxis, axes.yaxis):
                label = axis.get_label_text()
                assert (
                    not label
                    or re.search(r"\([mµnpkM]?[VAsF]\)$", label)
                    or getattr(axis.get_major_formatter(), "unit", "")
                )
        assert any(axes.get_xlabel() for axes in figure.axes)


def test_no_trend_is_drawn_through_one_bias() -> None:
    assert plot_times([row("SP-2-01", 1e-7)], "bias_V", ("rise_time_s",), "t") is None


def test_a_bound_of_the_dark_current_is_drawn_as_a_bound_and_not_as_a_value() -> None:
    points = (
        DarkPoint(bias_V=12.0, current_A=Estimate(hi95=6e-12)),
        DarkPoint(bias_V=5.0, current_A=Estimate(hi95=4e-12)),
    )
    figure = plot_dark_current(DarkFit(device="d", element=1, points=points), "t")
    assert [t.get_text() for t in figure.legends[0].get_texts()] == ["upper bound, 95 %"]


def test_the_shortest_pulse_is_marked_and_named() -> None:
    points = [
        PulseWidthPoint(bias_V=12.0, load_ohm=1e4, width_in_s=w, width_ratio=1.0, amplitude_ratio=a)
        for w, a in ((5e-7, 0.7), (1e-6, 0.92), (2e-6, 1.0))
    ]
    shortest = ShortestPulse(
        bias_V=12.0,
        load_ohm=1e4,
        shortest_pulse_s=Estimate(value=9e-7, u=3e-8),
        highest_rate_Hz=Estimate(value=5e5, u=1e4),
    )
    figure = plot_pulse_widths(points, [shortest], "t")
    assert any(t.get_text() == "shortest 900(30) ns" for t in figure.axes[0].texts)


def test_where_no_pair_meets_the_wishes_the_nearest_miss_is_named_with_what_it_misses() -> None:
    point = OperatingPoint(
        bias_V=5.0, load_ohm=1e3, signal_V=Estimate(value=0.1, u=0.001), rise_time_s=Estimate(value=1e-7, u=1e-9),
        shortest_pulse_s=Estimate(value=2e-7, u=2e-9), dark_current_A=None, misses=("dark current not known here",),
    )  # fmt: skip
    choice = Choice(device="d", element=1, wish=Wish(pulse_width_s=1e-6), candidates=(point,), best=None, nearest=point)
    words = " ".join(t.get_text() for t in plot_choice(choice).axes[0].texts)
    assert "nearest miss: 5 V, 1 kΩ" in words
    assert "dark current not known here" in words


def test_a_choice_without_any_candidate_is_still_drawn() -> None:
    empty = Choice(device=None, element=None, wish=Wish(pulse_width_s=1e-6), candidates=(), best=None, nearest=None)
    assert svg_of(plot_choice(empty)).startswith("<?xml")


def test_the_shape_of_a_point_tells_the_verdict_without_its_colour() -> None:
    screening = screen([row("SP-2-01", 80e-9), row("SP-2-02", 200e-9), row("SP-2-03", 110e-9)], LIMITS)
    shapes = [line.get_marker() for line in plot_limit(screening.devices, 0, "t").legends[0].legend_handles]
    assert len(set(shapes)) == len(shapes) == 3


def test_the_page_says_first_what_did_not_pass_and_why() -> None:
    rows = (row("SP-2-01", 80e-9), row("SP-2-02", 200e-9))
    text = text_of(page(measurements=rows, screening=screen(rows, LIMITS)))
    assert text.index("fail") < text.index("What did not pass") < text.index("above the limit by 90 ns")
    assert text.index("above the limit") < text.index("Each device against each limit") < text.index("Measurements")


def test_every_flag_is_explained_where_it_stands_and_again_below() -> None:
    source = html.unescape(page(measurements=(row("SP-2-01", 80e-9, flags=tuple(REGISTRY)),)))
    for flag in REGISTRY.values():
        assert f'title="{flag.sentence} {flag.mend}">{flag.code}</abbr>' in source
        assert flag.sentence in text_of(source)


def test_hostile_names_reach_neither_the_page_nor_a_picture_as_code() -> None:
    capture, marks = pulse_capture(HOSTILE)
    figure = plot_capture(capture, marks)
    picture = WaveformPicture(capture=HOSTILE, figure=figure, words=HOSTILE)
    rows = (row(HOSTILE, 200e-9),)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        source = page(
            title=HOSTILE, sources=(HOSTILE,), measurements=rows, screening=screen(rows, LIMITS), waveforms=(picture,),
            refusals=((HOSTILE, HOSTILE),), fit_errors=(HOSTILE,),
        )  # fmt: skip
        svg = svg_of(figure)
    assert "<script" not in source
    assert "<script" not in svg
    source.encode("utf-8")
    assert not re.search("[\x00-\x08\x0b-\x1f\u202e\ud800-\udfff]", source + svg)


@pytest.mark.parametrize("count", [1, 200])
def test_a_page_for_a_lot_stays_small_and_names_every_part_that_fails(count: int) -> None:
    rows = tuple(row(f"SP-2-{n:03}", 200e-9 if n % 50 == 0 else 80e-9, flags=("large_signal",)) for n in range(count))
    source = page(measurements=rows, screening=screen(rows, LIMITS))
    assert len(source) < 1e6
    text = text_of(source)
    assert all(f"SP-2-{n:03}" in text for n in range(0, count, 50))


def test_what_is_left_out_is_said() -> None:
    text = text_of(page(measurements=tuple(row(f"d{n}", 1e-7) for n in range(401)), waveforms_left_out=7))
    assert "1 more rows are not shown" in text


def test_a_picture_changes_no_setting_of_the_caller() -> None:
    before = dict(mpl.rcParams)
    capture, marks = pulse_capture()
    svg_of(plot_capture(capture, marks))
    plot_dark_trace(capture)
    assert dict(mpl.rcParams) == before


def test_a_device_without_a_fit_still_shows_its_trend() -> None:
    from darkedge.analysis.explain import ExplainedDevice
    from darkedge.analysis.pictures.device import device_figures

    rows = tuple(row("SP-2-01", 1e-7 / b, bias_V=b) for b in (1.0, 5.0))
    device = ExplainedDevice(
        lot=None, device="SP-2-01", element=1, device_kind=DeviceKind.PHOTODIODE, measurements=rows
    )
    assert list(device_figures(device)) == ["edge times"]
