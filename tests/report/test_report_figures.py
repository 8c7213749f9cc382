"""The figures: every one is drawn, survives missing data, and shows what it says."""

import subprocess
import sys
from dataclasses import replace
from xml.etree import ElementTree

import matplotlib as mpl
import numpy as np
import pytest
import xarray as xr
from hypothesis import given, settings
from hypothesis import strategies as st
from report_examples import layouts, patch_report, renamed

from leakpipe.codes.rotated import rotated_surface
from leakpipe.estimates import Estimate, store
from leakpipe.report.evidence import KINDS, OTHER, kinds_of
from leakpipe.report.figures import FIGURES, write_figures
from leakpipe.report.figures.clouds import plane, separations
from leakpipe.report.figures.populations import closing_points, measure_points
from leakpipe.report.figures.style import NothingToDraw, look, spread_apart, write

SVG = "{http://www.w3.org/2000/svg}"


def texts(path):
    """Return all text of an SVG file, which must be well-formed."""
    root = ElementTree.parse(path).getroot()
    return ["".join(node.itertext()) for node in root.iter(f"{SVG}text")]


def written(name, patch, folder):
    """Draw and write one figure; return it with its SVG file."""
    with look():
        drawing = FIGURES[name][1](patch, "somewhere")
        return drawing, write(drawing.figure, folder / name)[0]


def without(patch, stage, *names):
    """Return the patch with variables of a stage taken away."""
    return replace(
        patch, stages={**patch.stages, stage: patch.stages[stage].drop_vars(list(names))}
    )


@pytest.mark.parametrize("name", list(layouts()))
def test_every_figure_is_written(name, tmp_path, drawn):
    """Small, line-shaped and 49-qubit patches get all figures, as SVG and PNG, with their words."""
    patch = patch_report(layout=layouts()[name])
    made = drawn if name == "surface 3" else write_figures(patch, tmp_path)
    assert [figure.name for figure in made] == list(FIGURES)
    for figure in made:
        assert not figure.missing
        assert figure.caption
        assert figure.alt
        assert figure.png.read_bytes().startswith(b"\x89PNG")
        assert any(figure.title in words for words in texts(figure.svg))


def test_nothing_to_draw_is_said(bare, tmp_path):
    """Without any stage there are no files, and each figure names what is missing."""
    for figure in write_figures(bare, tmp_path):
        assert figure.svg is None
        assert figure.missing
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(
    ("stage", "own"),
    [
        ("model", {"readout-overview", "readout-clouds"}),
        ("readout", set()),
        ("rates", {"detection", "chip", "correlation"}),
        ("logical", {"fidelity"}),
        ("share", {"routes"}),
    ],
)
def test_one_stage_missing(stage, own, patch):
    """The loss of any one stage costs its own figures only."""
    left = replace(patch, stages={n: data for n, data in patch.stages.items() if n != stage})
    lost = set()
    with look():
        for name, (_, draw) in FIGURES.items():
            try:
                draw(left, "somewhere")
            except NothingToDraw:
                lost.add(name)
    assert lost == own


@pytest.mark.parametrize(
    ("figure", "stage", "names"),
    [
        ("detection", "rates", ["fit_detection", "fit_detection_low", "fit_detection_high"]),
        ("detection", "rates", ["mean_detection_error"]),
        ("correlation", "rates", ["lag_covariance_error", "lag_covariance_fit"]),
        ("populations", "rates", ["expected_leaked", "expected_leaked_low"]),
        ("populations", "readout", ["leaked_shot_error", "closing_leaked_calibration_error"]),
        ("populations", "readout", ["shots", "closing_leaked"]),
        ("fidelity", "logical", ["logical_error_error", "amplitude"]),
        ("fidelity", "share", ["per_round_without", "fidelity_without"]),
        ("routes", "share", ["leakage_share_statistical"]),
        ("readout-overview", "model", ["assignment_as_prepared", "error_ratio", "usable"]),
    ],
)
def test_optional_variables(figure, stage, names, patch, tmp_path):
    """Errors, fits and bands may be missing; the rest of the figure is still drawn."""
    written(figure, without(patch, stage, *names), tmp_path)


def test_one_recording_of_one_round(tmp_path):
    """A single recording of a single round is drawn, as far as there is something to draw."""
    patch = patch_report(rounds=(1,))
    for name in ("detection", "populations", "fidelity", "correlation"):
        written(name, patch, tmp_path)


def test_all_nan(patch, tmp_path):
    """A stage that could tell nothing (NaN everywhere) is no error and gives no empty figure."""

    def emptied(data):
        return data.map(lambda one: one * np.nan if one.dtype.kind == "f" else one)

    stages = {name: emptied(data) for name, data in patch.stages.items()}
    made = write_figures(replace(patch, stages=stages), tmp_path)
    assert {f.name for f in made if f.svg} <= {
        "routes",
        "evidence",
        "readout-clouds",
        "readout-overview",
    }


@pytest.mark.parametrize("name", ["<script>alert(1)</script>", "a$b_c$", "Q&A\"'", "Ω-7", "--> x"])
def test_odd_names_are_text(name, tmp_path):
    """A qubit may be called anything: its name is text in the figure, no markup and no formula."""
    patch = patch_report(layout=renamed(rotated_surface(3), "D3", name))
    for figure in ("chip", "readout-overview"):
        _, svg = written(figure, patch, tmp_path)
        assert any(words.startswith(name[:7]) for words in texts(svg))
        assert not ElementTree.parse(svg).getroot().findall(f".//{SVG}script")


@pytest.mark.parametrize("name", ["detection", "chip"])
def test_same_data_same_files(name, patch, tmp_path):
    """The same data give the same bytes, so that a rerun changes nothing."""
    for folder in ("a", "b"):
        (tmp_path / folder).mkdir()
        written(name, patch, tmp_path / folder)
    for ending in ("svg", "png"):
        one, other = (tmp_path / folder / f"{name}.{ending}" for folder in ("a", "b"))
        assert one.read_bytes() == other.read_bytes()


def test_users_settings_are_left_alone(patch, tmp_path):
    """Settings of the caller neither leak into the figures nor are they changed."""
    plain = written("detection", patch, tmp_path)[1].read_bytes()
    with mpl.rc_context({"font.size": 30, "axes.facecolor": "black"}):
        before = {key: value for key, value in mpl.rcParams.items() if key != "backend"}
        assert written("detection", patch, tmp_path)[1].read_bytes() == plain
        after = {key: value for key, value in mpl.rcParams.items() if key != "backend"}
        assert after == before


def test_pyplot_stays_out():
    """Importing and drawing never loads pyplot, which would look for a display."""
    code = "import sys, leakpipe.report.figures; sys.exit('matplotlib.pyplot' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


def test_report_imports_without_matplotlib():
    """Summary, run log and page need no matplotlib, so that they start at once."""
    code = (
        "import sys, leakpipe.report.summary, leakpipe.report.run_log, leakpipe.report.page, "
        "leakpipe.report.epochs; sys.exit('matplotlib' in sys.modules)"
    )
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0


@given(
    seed=st.integers(0, 10_000), states=st.sampled_from([2, 3]), features=st.sampled_from([2, 4])
)
@settings(max_examples=50)
def test_plane_keeps_separations(seed, states, features):
    """Distances in the plane are Mahalanobis distances, and clouds in it are round.

    The bound is rounding: condition of the covariance (below 1e4 here) times machine epsilon.
    """
    rng = np.random.default_rng(seed)
    means = 5 * rng.normal(size=(states, features))
    root = rng.normal(size=(features, features))
    covariance = root @ root.T + 0.1 * np.eye(features)
    _, turn, at = plane(means, covariance)
    tolerance = np.linalg.cond(covariance) * 1e-14 + 1e-12
    for a in range(states):
        for b in range(a):
            apart = means[a] - means[b]
            expected = np.sqrt(apart @ np.linalg.solve(covariance, apart))
            assert np.linalg.norm(at[a] - at[b]) == pytest.approx(expected, rel=1e3 * tolerance)
    np.testing.assert_allclose(turn.T @ covariance @ turn, np.eye(2), atol=1e3 * tolerance)
    assert at[0] == pytest.approx([0, 0])
    assert at[1][1] == pytest.approx(0, abs=1e3 * tolerance * max(abs(at[1][0]), 1))


def test_separations_of_the_example(patch):
    """Means 4.8 apart with a known covariance come out at 4.8 over its standard deviation."""
    deviation = np.sqrt(patch.stages["model"]["covariance"].values[:, 0, 0])
    np.testing.assert_allclose(separations(patch)[:, 0], 4.8 / deviation, rtol=1e-12)


def test_placed_class_is_not_drawn(patch, tmp_path):
    """Where no |2> was prepared, the class the stage put far away takes no part in the picture."""
    model = patch.stages["model"].copy(deep=True)
    model["mean"][0, 2] = 60.0
    model["usable"][0] = 0
    placed = replace(patch, stages={**patch.stages, "model": model})
    assert np.isnan(separations(placed)[0, 1:]).all()
    assert np.isfinite(separations(placed)[1:]).all()
    written("readout-clouds", placed, tmp_path)


def test_points_are_drawn_where_given(patch, tmp_path):
    """Calibration points, missing ones among them, appear in the panels of their qubits only."""
    rng = np.random.default_rng(3)
    iq = rng.normal(size=(2, 2, 40, 2))
    iq[0, 0, :5] = np.nan
    points = xr.Dataset(
        {"iq": (("qubit", "prepared", "point", "quadrature"), iq)},
        coords={"qubit": ["D0", "elsewhere"], "prepared": [0, 1]},
    )
    drawing, _ = written("readout-clouds", replace(patch, points=points), tmp_path)
    clouds = [
        line for panel in drawing.figure.axes for line in panel.lines if line.get_rasterized()
    ]
    assert [len(line.get_xdata()) for line in clouds] == [40, 40]


def small_readout(values, shots, shot_error, calibration_error):
    """Return a patch whose readout stage holds (recording, round, measure) values."""
    recordings, rounds, measure = values.shape
    dims = ("recording", "round", "measure")
    data = xr.Dataset(
        {
            "leaked": (dims, values),
            "leaked_shot_error": (dims, np.full(values.shape, shot_error)),
            "leaked_calibration_error": (dims, np.full(values.shape, calibration_error)),
        },
        coords={
            "recording": [f"r{i}" for i in range(recordings)],
            "rounds": ("recording", [rounds] * recordings),
            "shots": ("recording", shots),
            "injected": ("recording", [0] * (recordings - 1) + [1]),
            "round": np.arange(1, rounds + 1),
            "measure": [f"M{i}" for i in range(measure)],
        },
    )
    return replace(patch_report(stages=()), stages={"readout": data})


def test_pooled_populations():
    """Recordings are weighted by shots, injected ones left out, errors add as stated."""
    values = np.array([[[0.01, 0.03]], [[0.02, 0.06]], [[0.9, 0.9]]])
    rounds, mean, error, common = measure_points(
        small_readout(values, [100, 300, 999], 0.004, 0.001)
    )
    assert rounds.tolist() == [1]
    assert mean[0] == pytest.approx((0.0175 + 0.0525) / 2)
    # Shots: weights 1/4 and 3/4 over recordings, then a mean of two independent qubits.
    assert error[0] == pytest.approx(1.96 * 0.004 * np.sqrt(2 * (0.25**2 + 0.75**2)) / 2)
    # Calibration: the same in both recordings, independent between the two qubits.
    assert common == pytest.approx(1.96 * 0.001 * np.sqrt(2) / 2)


def test_a_round_without_one_qubit_is_no_other_mean():
    """Where a used qubit has no value, the round is left out and not averaged over the others."""
    values = np.full((2, 2, 2), 0.01)
    values[:, 1, 0] = np.nan
    rounds, *_ = measure_points(small_readout(values, [100, 100], 0.001, 0.0))
    assert rounds.tolist() == [1]


def test_unusable_populations_are_not_shown():
    """A population that the readout stage refused does not enter a mean, whatever it holds."""
    assert measure_points(patch_report(usable=False)) is None
    assert closing_points(patch_report(usable=False)) is None


def test_closing_points_per_duration(patch):
    """The closing readout has one point per number of rounds."""
    rounds, mean, error, common = closing_points(patch)
    assert rounds.tolist() == list(patch.rounds)
    stored = patch.stages["readout"]["closing_leaked"].mean("data").values
    np.testing.assert_allclose(mean, stored, rtol=1e-12)
    assert (error > 0).all()
    assert common > 0


@given(st.lists(st.floats(0, 10), min_size=1, max_size=6), st.floats(0.01, 1))
def test_labels_keep_their_distance_and_order(heights, least):
    """Labels end up at least the asked distance apart, in the order of their curves.

    Halving the overlap in each pass converges geometrically; what is left after 50 passes for six
    labels is below a twentieth of the distance.
    """
    moved = np.array(spread_apart(heights, least))
    order = np.argsort(heights, kind="stable")
    assert (np.diff(np.sort(moved)) >= 0.95 * least).all()
    assert (np.diff(moved[order]) >= -1e-9).all()


def test_upper_limit_of_the_share(patch, tmp_path):
    """A share that is only bounded is drawn as a limit, not as a value."""
    limit = Estimate.upper_limit(0.02, "no leakage seen")
    share = patch.stages["share"]
    names = [n for n in share.variables if str(n).startswith("leakage_share")]
    share = share.drop_vars(names).assign(store("leakage_share", (), limit))
    routes, _ = written("routes", replace(patch, stages={**patch.stages, "share": share}), tmp_path)
    assert "reported below 2.00 %" in routes.alt


def test_evidence_words():
    """A basis is read for the kinds of data it names; an unknown one is kept as such."""
    assert kinds_of("pair covariances, means, closing readout") == {
        "lag covariances", "rise of the means", "closing readout",
    }  # fmt: skip
    assert kinds_of("tea leaves") == {OTHER}
    assert OTHER not in KINDS
