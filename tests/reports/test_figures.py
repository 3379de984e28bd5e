"""Figures: nothing cut or covered, readable with colour-vision deficiency, and no trace left in matplotlib."""

import itertools
import subprocess
import sys
from dataclasses import replace

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.text import Text

from napari_boutonrelease.flags import FLAGS
from napari_boutonrelease.quanta import gamma_vesicles_logpdf
from napari_boutonrelease.reports import figures_style as style
from napari_boutonrelease.reports.figures import (
    figure_bouton,
    figure_pulse_pairs,
    figure_release_along_axon,
    figures_of,
    write_figure,
)
from napari_boutonrelease.reports.figures_bouton import envelope
from napari_boutonrelease.reports.figures_page import text_width_mm, wrapped
from napari_boutonrelease.reports.figures_pages import pages
from napari_boutonrelease.reports.figures_trials import align_trials, mean_of_trials
from napari_boutonrelease.reports.histogram import amplitude_density, bin_edges, fitted_components
from napari_boutonrelease.reports.report import write_report
from napari_boutonrelease.response_shape import ResponseShape

BRIGHT, SILENT = 1, 3  # rows of the invented recording

# Machado, Oliveira & Fernandes (2009), severity 1, linear RGB.
DEFICIENCIES = {
    "none": np.eye(3),
    "protan": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "deutan": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
    "tritan": np.array(
        [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900]]
    ),
}


def lab(colour, matrix):
    srgb = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    linear = np.clip(matrix @ np.where(srgb <= 0.04045, srgb / 12.92, ((srgb + 0.055) / 1.055) ** 2.4), 0, 1)
    to_xyz = np.array([[0.41246, 0.35758, 0.18044], [0.21267, 0.71515, 0.07217], [0.01933, 0.11919, 0.95030]])
    f = to_xyz @ linear / np.array([0.95047, 1.0, 1.08883])
    f = np.where(f > 0.008856, np.cbrt(f), 7.787 * f + 16 / 116)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("deficiency", DEFICIENCIES)
def test_colours_that_share_a_panel_stay_apart(deficiency):
    matrix = DEFICIENCIES[deficiency]
    panels = [
        [colour for colour, *_ in style.FOUND_BY.values()],
        [style.EVOKED, style.FIT, style.NULL, style.INK],
        [style.EVOKED, style.PULSE_2],
        [colour for colour, _ in style.VERDICTS.values()],
    ]
    for colours in panels:
        for one, other in itertools.combinations(colours, 2):
            assert np.linalg.norm(lab(one, matrix) - lab(other, matrix)) > 15, (one, other)


def test_categories_differ_by_marker_too():
    assert len({marker for _, marker, *_ in style.FOUND_BY.values()}) == len(style.FOUND_BY)
    assert len({marker for _, marker in style.VERDICTS.values()}) == len(style.VERDICTS)


@pytest.mark.parametrize("deficiency", DEFICIENCIES)
def test_the_colour_map_darkens_all_the_way(deficiency):
    lightness = [lab(colour, DEFICIENCIES[deficiency])[0] for colour in style.SEQUENTIAL_COLOURS]
    assert (np.diff(lightness) < -6).all()


def texts_of(figure):
    """Every text that is really drawn, and its extent on the paper."""
    drawn, draw = [], Text.draw

    def record(self, renderer, *args, **kwargs):
        if self.get_visible() and self.get_text().strip():
            drawn.append((self, self.get_window_extent(renderer)))
        return draw(self, renderer, *args, **kwargs)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(Text, "draw", record)
        figure.draw_without_rendering()
    return drawn


def check_layout(figure, *, dpi=300):
    """No text reaches over the paper's edge, and no two texts of one page cover each other; return what is said.

    A PDF has no pixels; at few of them each letter's width would be rounded.
    """
    figure.set_dpi(dpi)
    extents = texts_of(figure)
    assert extents
    for text, box in extents:
        assert box.x0 >= 0, text.get_text()
        assert box.y0 >= 0, text.get_text()
        assert box.x1 <= figure.bbox.width, text.get_text()
        assert box.y1 <= figure.bbox.height, text.get_text()
    for (one, box), (other, other_box) in itertools.combinations(extents, 2):
        wide = min(box.x1, other_box.x1) - max(box.x0, other_box.x0)
        high = min(box.y1, other_box.y1) - max(box.y0, other_box.y0)
        # An extent holds empty room for ascenders and descenders: a hairline of it may be shared.
        assert min(wide, high) < 0.25 * min(box.height, other_box.height), (
            f"{one.get_text()!r} covers {other.get_text()!r}"
        )
    return " ".join(text.get_text() for text, _ in extents)


@pytest.mark.parametrize(
    "name", ["result", "train_result", "selected_result", "quiet_result", "blank_result", "empty_result"]
)
def test_no_text_on_a_page_is_cut_or_covered(request, name):
    for page in pages(request.getfixturevalue(name)):
        check_layout(page())


def test_long_names_many_flags_and_many_cautions_fit(small_result):
    codes = ";".join(FLAGS)
    crowded = replace(
        small_result,
        name="a_very_long_recording_name_with_date_and_slice_and_cell_and_condition_2026-03-02_0001_of_many",
        boutons=small_result.boutons.assign(flags=codes),
        cautions=tuple(
            f"Caution {i}: " + "something about this recording that takes a long time to say. " * 3 for i in range(12)
        ),
    )
    said = " ".join(check_layout(page()) for page in pages(crowded))
    assert all(code in said for code in FLAGS)
    assert all(f"Caution {i}:" in said for i in range(12))


def said_by(figure):
    return check_layout(figure, dpi=150)


def test_a_silent_bouton_is_not_drawn_as_if_it_had_vesicles(result):
    words = said_by(figure_bouton(result, SILENT))
    assert "No release was seen. The 95 % interval of p_release ends at" in words
    assert "as the axon's other boutons have them" in words
    assert "n_sites" not in words
    assert "binomial" not in words
    words = said_by(figure_bouton(result, SILENT - 1))
    assert "n_sites" in words
    assert "No release" not in words

    q_panel = figure_release_along_axon(result).axes[1]
    silent_at = float(result.boutons["axon_um"][SILENT])
    drawn_at = {float(line.get_xdata()[0]) for line in q_panel.lines}
    assert silent_at not in drawn_at
    assert float(result.boutons["axon_um"][SILENT - 1]) in drawn_at
    probabilities = figure_pulse_pairs(result).axes[1]
    assert str(SILENT + 1) not in [text.get_text() for text in probabilities.texts]
    assert str(SILENT) in [text.get_text() for text in probabilities.texts]


def test_where_nothing_releases_no_mean_of_zeros_is_given(quiet_result):
    words = said_by(pages(quiet_result)[0]())
    assert "< 0.20" in words
    assert "no release seen" in words
    assert "mean p_release" not in words
    assert "of an assumed size" in said_by(figure_bouton(quiet_result, 0))


def test_the_mean_of_boutons_found_by_responses_stands_beside_that_of_all(result):
    words = said_by(pages(result)[0]())
    assert "mean p_release, all boutons" in words
    assert "those found by responses" in words
    assert f"{result.summary['population']['p_release_found_by_responses']:.2f}" in words


def test_an_interval_without_an_end_is_said_to_have_none(result):
    words = said_by(figure_bouton(result, BRIGHT))
    assert "over 1000" in words


def test_without_a_path_nothing_is_said_to_lie_along_the_axon(result):
    lost = replace(result, boutons=result.boutons.assign(axon_um=np.nan))
    words = check_layout(pages(lost)[1]())
    assert "along the axon (µm)" not in words
    assert "give the course of the axon" in words
    assert [label.get_text() for label in figure_release_along_axon(lost).axes[1].get_xticklabels()] == [
        str(bouton) for bouton in lost.boutons["bouton"]
    ]


def test_given_positions_have_no_map_of_evidence(result):
    given = replace(result, evidence=np.zeros_like(result.evidence), evidence_cut=np.nan)
    assert "Evidence" not in check_layout(pages(given)[1]())
    assert "Evidence" in check_layout(pages(result)[1]())


def test_noise_without_evidence_stays_pale(result):
    noise = np.random.default_rng(3).gamma(1.0, 0.7, result.evidence.shape)
    figure = pages(replace(result, evidence=noise, evidence_cut=10.0))[1]()
    image = next(axes.images[0] for axes in figure.axes if axes.images)
    assert image.norm.vmin == 0
    assert np.median(np.asarray(image.norm(noise))) < 0.25


def test_trials_are_aligned_on_their_first_pulse(result):
    trials = align_trials(result, BRIGHT)
    assert trials.frames_a_bin == 1
    used = (result.responses["bouton"] == BRIGHT + 1) & (result.responses["pulse"] == 1)
    first = result.responses[used & (result.responses["used"] == 1)]
    np.testing.assert_array_equal(trials.called, first["called"] == 1)
    time_s, mean = mean_of_trials(trials)
    assert np.all(np.diff(time_s) > 0)
    assert abs(mean[time_s < -0.005].mean()) < 0.02
    peak = mean[(time_s > 0) & (time_s < 0.02)].max()
    assert peak == pytest.approx(0.9 * float(result.boutons["amplitude_mean"][BRIGHT]), rel=0.25)
    # The last points must not rest on the few trials that reach furthest.
    assert np.abs(np.diff(mean[-4:])).max() < 0.1


def test_slow_recordings_are_binned_and_drawn_in_seconds(result):
    slow = replace(
        result,
        time_s=1000 * result.time_s,
        stimulus_s=1000 * result.stimulus_s,
        shape=ResponseShape(latency_s=0.0, rise_s=2.0, decay_s=60.0),
        summary={},
    )
    trials = align_trials(slow, BRIGHT)
    assert trials.level.shape[1] <= 92
    axes = next(axes for axes in figure_bouton(slow, BRIGHT).axes if "pulse 1" in axes.get_xlabel())
    assert axes.get_xlabel() == "time from pulse 1 (s)"


def test_every_figure_stands_alone_without_cut_text(result):
    listing = figures_of(result)
    assert {"map", "release_along_axon", "calls", "quality", "pulse_pairs", "bouton_01", "bouton_09"} <= listing.keys()
    for stem, draw in listing.items():
        if not stem.startswith("bouton") or stem in ("bouton_01", "bouton_04", "bouton_07"):
            check_layout(draw(), dpi=150)


def test_trains_and_pulse_intervals_have_figures_where_there_are_any(result, train_result):
    assert not {"trains", "pulse_intervals"} & figures_of(result).keys()
    listing = figures_of(train_result)
    said = check_layout(listing["trains"](), dpi=150)
    assert "u 0.40 and recovery 300 ms" in said
    assert "pool 1.36 dF/F (95 %: 1.09 to 1.77)" in said
    assert "depression 0.60, 200 ms" in check_layout(listing["pulse_intervals"](), dpi=150)


def test_missed_boutons_have_a_figure_and_a_page_where_any_were_simulated(result, selected_result):
    assert "detection" not in figures_of(result)
    words = " ".join(text.get_text() for text in figures_of(selected_result)["detection"]().findobj(Text))
    assert "50 % at 0.05" in words
    assert "200 simulated boutons" in words
    assert "below 0.02" in words
    assert len(pages(selected_result)) == len(pages(replace(selected_result, detection=result.detection))) + 1


def test_a_detection_that_misses_nearly_all_is_drawn_without_a_mean(selected_result):
    table = selected_result.detection.assign(found_share=0.05, found_share_fit=0.05, found=10)
    selection = {"boutons": 1, "method": "none: even boutons that always release are missed"}
    blind = replace(selected_result, detection=table, summary={**selected_result.summary, "selection": selection})
    words = " ".join(text.get_text() for text in figures_of(blind)["detection"]().findobj(Text))
    assert "No corrected mean: even boutons that always release are missed." in words.replace("\n", " ")


def test_trains_that_say_nothing_are_drawn_as_words(train_result):
    summary = {**train_result.summary, "train": {"pulses": 6, "note": "no pool"}}
    bare = replace(train_result, trains=train_result.trains.assign(pool_vesicles=np.nan, u=np.nan), summary=summary)
    said = check_layout(figures_of(bare)["trains"](), dpi=150)
    assert "No bouton has a pool." in said
    assert "The amplitudes of the train" in said


def test_text_in_svg_stays_text(written):
    svg = (written / "figures" / "release_along_axon.svg").read_text(encoding="utf-8")
    assert "distance along the axon (µm)</text>" in svg


def test_the_report_has_a_page_for_every_pair_of_boutons(written, small_result):
    data = (written / "report.pdf").read_bytes()
    assert data.startswith(b"%PDF")
    assert data.count(b"/Type /Page\n") + data.count(b"/Type /Page ") == len(pages(small_result))


@pytest.mark.parametrize("name", ["blank_result", "empty_result"])
def test_a_report_of_nothing_says_so_in_words(request, tmp_path, name):
    nothing = request.getfixturevalue(name)
    write_report(nothing, tmp_path / "report.pdf")
    assert (tmp_path / "report.pdf").stat().st_size > 5000
    words = check_layout(pages(nothing)[0]())
    assert {"blank_result": "could be measured at no bouton", "empty_result": "No bouton was found"}[name] in words
    for draw in figures_of(nothing).values():
        check_layout(draw())


def test_a_user_s_own_style_is_neither_used_nor_changed(small_result, tmp_path):
    with mpl.rc_context({"axes.facecolor": "black", "font.size": 30.0, "lines.linewidth": 9.0}):
        before = dict(mpl.rcParams)
        figure = figures_of(small_result)["calls"]()
        write_figure(figure, tmp_path / "calls.svg")
        assert dict(mpl.rcParams) == before
    assert "font: 30px" not in (tmp_path / "calls.svg").read_text(encoding="utf-8")
    assert figure.axes[0].get_facecolor()[3] == 0


def test_writing_reports_loads_no_pyplot_and_importing_them_no_matplotlib():
    code = (
        "import sys, napari_boutonrelease.reports as r; assert 'matplotlib' not in sys.modules; "
        "assert 'pandas' not in sys.modules; import napari_boutonrelease.reports.figures, "
        "napari_boutonrelease.reports.figures_pages; assert 'matplotlib.pyplot' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_an_envelope_is_short_and_loses_no_peak():
    rng = np.random.default_rng(8)
    trace = rng.normal(size=100_003)
    trace[51_234], trace[70_001:70_300] = 40.0, np.nan
    time, thin = envelope(np.arange(trace.size) * 0.01, trace)
    assert len(time) == len(thin) < 2500
    assert np.nanmax(thin) == 40.0
    assert np.nanmin(thin) == np.nanmin(trace)
    assert time[np.nanargmax(thin)] == pytest.approx(512.34, abs=1.5)
    assert np.isnan(thin).any()
    np.testing.assert_array_equal(envelope(np.arange(50.0), trace[:50])[1], trace[:50])


def test_model_components_follow_the_binomial_law(result):
    amplitude = np.linspace(-1.0, 3.0, 20_001)
    step = amplitude[1] - amplitude[0]
    boutons = result.boutons
    row = int(np.flatnonzero(boutons["n_sites"] == 3)[0])
    n, p, q, q_cv = (float(boutons[name][row]) for name in ("n_sites", "p_site", "q", "q_cv"))
    noise = np.array([0.02, 0.03, np.nan])
    components = fitted_components(boutons, row, amplitude, noise_sd=noise)
    assert len(components) == 4
    np.testing.assert_allclose(
        components.sum(axis=1) * step, [(1 - p) ** 3, 3 * p * (1 - p) ** 2, 3 * p**2 * (1 - p), p**3], rtol=1e-5
    )
    total = components.sum(axis=0)
    mean = np.sum(total * amplitude) * step
    variance = np.sum(total * (amplitude - mean) ** 2) * step
    assert mean == pytest.approx(n * p * q, rel=1e-4)
    expected = np.nanmean(noise**2) + n * p * (q * q_cv) ** 2 + n * p * (1 - p) * q**2
    assert variance == pytest.approx(expected, rel=1e-4)


def test_the_model_drawn_is_that_of_the_fit(result):
    boutons = result.boutons
    row = int(np.flatnonzero(boutons["n_sites"] == 2)[0])
    at = np.array([0.0, 0.1, 0.25])
    drawn = fitted_components(boutons, row, at, noise_sd=np.array([0.02]))[2]
    q, q_cv, p = (float(boutons[name][row]) for name in ("q", "q_cv", "p_site"))
    density = np.exp(gamma_vesicles_logpdf(at, vesicles=2, q=q, q_cv=q_cv, noise_sd=0.02))
    np.testing.assert_allclose(drawn, p**2 * density, rtol=1e-9)


def test_many_trials_are_stood_for_by_few_noise_levels(result):
    noise = np.random.default_rng(5).uniform(0.02, 0.03, 400)
    row = int(np.flatnonzero(result.boutons["n_sites"] == 2)[0])
    at = np.linspace(-0.2, 0.8, 300)
    few = fitted_components(result.boutons, row, at, noise_sd=noise).sum(axis=0)
    all_of_them = np.mean(
        [fitted_components(result.boutons, row, at, noise_sd=one[None]).sum(axis=0) for one in noise], axis=0
    )
    assert np.abs(few - all_of_them).max() < 0.005 * all_of_them.max()


def test_a_poisson_model_has_the_failures_of_its_p_release(result):
    boutons = result.boutons.assign(quantal_model="poisson")
    amplitude = np.linspace(-1.0, 6.0, 20_001)
    noise = np.array([0.022])
    areas = fitted_components(boutons, 1, amplitude, noise_sd=noise).sum(axis=1) * (amplitude[1] - amplitude[0])
    assert areas.sum() == pytest.approx(1.0, abs=1e-5)
    assert areas[0] == pytest.approx(1 - boutons["p_release"][1], rel=1e-5)
    assert len(fitted_components(result.boutons.assign(quantal_model="none"), 1, amplitude, noise_sd=noise)) == 0
    assert len(fitted_components(result.boutons, 1, amplitude, noise_sd=np.array([np.nan]))) == 0


def test_histograms_hold_every_amplitude():
    rng = np.random.default_rng(3)
    evoked, null = rng.normal(0.1, 0.1, 60), rng.normal(0, 0.02, 200)
    edges = bin_edges(evoked, null, noise_sd=0.02)
    assert edges[0] <= min(evoked.min(), null.min())
    assert edges[-1] >= max(evoked.max(), null.max())
    assert np.sum(amplitude_density(evoked, edges) * np.diff(edges)) == pytest.approx(1.0)
    assert len(bin_edges(np.zeros(3), np.empty(0), noise_sd=float("nan"))) >= 2


def test_bins_widen_where_amplitudes_are_few():
    rng = np.random.default_rng(4)
    null = rng.normal(0, 0.1, 300)
    many, few = (rng.choice([0.0, 0.4, 0.8], size) + rng.normal(0, 0.1, size) for size in (2000, 30))
    assert np.diff(bin_edges(many, null, noise_sd=0.1))[0] == pytest.approx(0.05)
    assert np.diff(bin_edges(few, null, noise_sd=0.1))[0] > 0.08


def test_wrapped_text_keeps_its_width_and_its_words():
    text = "Quote the set n_sites_lo to n_sites_hi, or record in a second release condition. " + "x" * 60
    lines = wrapped(text, 40.0)
    assert all(text_width_mm(line) <= 40.0 for line in lines)
    assert "".join(lines).replace(" ", "") == text.replace(" ", "")


def test_a_ratio_without_an_upper_end_shows_it(result):
    endless = result.boutons["ppr_hi"].where(result.boutons.index != BRIGHT, np.inf)
    open_ended = replace(result, boutons=result.boutons.assign(ppr_hi=endless))
    assert "to ∞)" in said_by(figure_bouton(open_ended, BRIGHT))
    bars = [line for line in figure_pulse_pairs(open_ended).axes[0].lines if list(line.get_xdata()) == [BRIGHT] * 2]
    assert max(bars[0].get_ydata()) > figure_pulse_pairs(open_ended).axes[0].get_ylim()[1]
