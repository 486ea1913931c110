"""Plots say what the numbers say: the data that is drawn is read back from the Axes."""

from __future__ import annotations

import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.collections import LineCollection, PathCollection, PolyCollection
from matplotlib.patches import FancyArrowPatch

from anneal_ref.base.errors import InputError
from anneal_ref.base.estimate import Estimate, Score
from anneal_ref.model import lattices
from anneal_ref.views import plots
from anneal_ref.views.lattice_plot import positions
from anneal_ref.views.style import DEVIATIONS, LIMIT, PROCESSOR, QUIET


def matrix(n: int, seed: int, stat: float = 0.0) -> Estimate:
    values = np.random.default_rng(seed).uniform(-0.9, 0.9, (n, n))
    values = (values + values.T) / 2
    np.fill_diagonal(values, 1.0)
    return Estimate(values, stat, 0.0)


def test_correlations_are_drawn_pair_by_pair_with_the_identity() -> None:
    truth, measured = matrix(5, 0), matrix(5, 1, 0.02)
    given = plots.new_axes()
    ax = plots.correlations([truth], [measured], given)
    assert ax is given
    container = ax.containers[0]
    upper = np.triu_indices(5, 1)
    assert np.allclose(container.lines[0].get_xdata(), truth.value[upper])
    assert np.allclose(container.lines[0].get_ydata(), measured.value[upper])
    vertical = container.lines[2][1].get_segments()
    assert np.allclose([segment[1, 1] - segment[0, 1] for segment in vertical], 0.04)
    assert any(line.get_xdata()[0] == line.get_ydata()[0] == -1 for line in ax.lines)
    assert "truth" in ax.get_xlabel()
    assert "processor" in ax.get_ylabel()


def test_many_correlations_become_a_density_that_counts_every_pair() -> None:
    truth, measured = [matrix(30, k) for k in range(3)], [matrix(30, k, 0.02) for k in range(3)]
    ax = plots.correlations(truth, measured)
    assert not ax.containers
    cells = next(one for one in ax.collections if isinstance(one, PolyCollection))
    assert np.sum(cells.get_array()) == 3 * 30 * 29 / 2


def test_bonds_and_sites_take_the_colours_of_their_deviations() -> None:
    lattice = lattices.square(2, 2)
    bonds, sites = np.array([4.0, -4.0, 0.0, 1.0]), np.array([0.0, 4.0, -4.0, 0.5])
    ax = plots.deviations(lattice, bonds, sites)
    coloured = [one for one in ax.collections if isinstance(one, LineCollection)][1]
    drawn = {}
    for segment, colour in zip(coloured.get_segments(), coloured.get_colors(), strict=True):
        drawn[tuple(map(tuple, segment))] = colour
    for edge, value in zip(lattice.edges, bonds, strict=True):
        ends = tuple(map(tuple, positions(lattice)[edge]))
        assert np.allclose(drawn[ends], DEVIATIONS((value + 4) / 8), atol=0.02)
    circles = next(one for one in ax.collections if isinstance(one, PathCollection))
    assert np.allclose(circles.get_facecolors(), DEVIATIONS((sites + 4) / 8), atol=0.02)
    assert [text.get_text() for text in ax.texts] == ["0", "1", "2", "3"]


def test_bonds_that_would_run_over_a_site_are_arcs() -> None:
    def arcs(ax: Axes) -> int:
        return sum(isinstance(one, FancyArrowPatch) for one in ax.patches) // 2

    ring, clique = lattices.ladder(5, periodic=True), lattices.biclique(4, 4)
    assert arcs(plots.deviations(ring, np.zeros(len(ring.edges)))) == 2
    assert arcs(plots.deviations(clique, np.zeros(len(clique.edges)))) == 0


def test_labels_of_diluted_lattices_are_those_of_the_device() -> None:
    lattice = lattices.square(2, 2).diluted(dead=[1])
    ax = plots.deviations(lattice, np.zeros(len(lattice.edges)))
    assert [text.get_text() for text in ax.texts] == ["0", "2", "3"]


@pytest.mark.parametrize(
    "lattice",
    [lattices.cubic(3, 3, 3), lattices.diamond(2, 2, 2), lattices.complete(6), lattices.random_regular(10, 3, seed=1)],
    ids=lambda lattice: lattice.name,
)
def test_no_two_sites_are_drawn_on_each_other(lattice: lattices.Lattice) -> None:
    places = positions(lattice)
    assert places.shape == (lattice.n_sites, 2)
    gaps = np.linalg.norm(places[:, None] - places[None, :], axis=2) + 10 * np.eye(lattice.n_sites)
    assert gaps.min() > 0.1
    plots.deviations(lattice, np.zeros(len(lattice.edges)))


def test_deviations_must_be_finite_and_fit() -> None:
    lattice = lattices.chain(3)
    with pytest.raises(InputError, match="bonds must have shape"):
        plots.deviations(lattice, [1.0])
    with pytest.raises(InputError, match="bonds must be finite"):
        plots.deviations(lattice, [1.0, np.nan])
    with pytest.raises(InputError, match="sites must have shape"):
        plots.deviations(lattice, [1.0, 2.0], [1.0])


def test_truth_is_a_line_and_the_processor_is_points_with_bars() -> None:
    truth = [Estimate(0.5, 0, 1e-3), Estimate(0.2, 0, 1e-3)]
    measured = [Estimate(0.55, 0.02, 0.0), Estimate(0.25, 0.01, 0.0)]
    ax = plots.against_duration([8.0, 1.0], truth, measured, "residual energy (J per spin)")
    line = next(one for one in ax.lines if one.get_label() == "truth")
    assert line.get_xdata().tolist() == [1.0, 8.0]
    assert line.get_ydata().tolist() == [0.2, 0.5]
    bars = ax.containers[0].lines[2][0].get_segments()
    assert np.allclose(bars[1][:, 1], [0.55 - 1.959964 * 0.02, 0.55 + 1.959964 * 0.02])
    assert ax.get_xlabel() == "duration (ns)"
    assert ax.get_xscale() == "linear"


def test_many_instances_are_averaged_instead_of_drawn_over_each_other() -> None:
    durations = np.repeat([1.0, 3.0, 10.0], 8)
    truth = [Estimate(k / 24, 0, 1e-3) for k in range(24)]
    measured = [Estimate(k / 24, 0.08, 0.0) for k in range(24)]
    names = [str(k % 8) for k in range(24)]
    ax = plots.against_duration(durations, truth, measured, "q2", instances=names)
    line = next(one for one in ax.lines if str(one.get_label()).startswith("truth"))
    assert np.allclose(line.get_ydata(), [3.5 / 24, 11.5 / 24, 19.5 / 24])
    bar = ax.containers[0].lines[2][0].get_segments()[0]
    assert bar[1, 1] - bar[0, 1] == pytest.approx(2 * 1.959964 * 0.08 / np.sqrt(8))
    assert ax.get_xscale() == "log"


def test_truth_and_processor_must_be_as_many() -> None:
    with pytest.raises(InputError, match="as many entries as truth, 2; got 1"):
        plots.against_duration([1.0, 2.0], [Estimate(0.0)] * 2, [Estimate(0.0)], "q2")


def test_correlation_errors_show_interval_floor_and_limit() -> None:
    def score(value: float, low: float, high: float) -> Score:
        return Score("correlation_error", Estimate(value, 0.01, 0.0), low, high, floor=Estimate(0.03))

    scores = [score(0.04, 0.02, 0.06), score(0.1, 0.08, 0.12), score(0.2, 0.18, 0.22), score(-0.02, 0.0, 0.05)]
    ax = plots.correlation_errors(["a", "b", "c", "d"], scores, 0.1)
    spans = [line for line in ax.lines if line.get_linewidth() == 2.4]
    assert [list(line.get_xdata()) for line in spans] == [[0.02, 0.06], [0.08, 0.12], [0.18, 0.22], [0.0, 0.05]]
    assert [line.get_color() for line in spans] == [PROCESSOR, QUIET, LIMIT, PROCESSOR]
    assert [label.get_text() for label in ax.get_yticklabels()] == ["a", "b", "c", "d"]
    assert ax.get_xlim()[0] < -0.02
    # a verdict rests on one-sided bounds, and may be firmer than the two-sided interval looks
    firm = plots.correlation_errors(["b"], scores[1:2], 0.1, outcomes=["accept"])
    assert [line.get_color() for line in firm.lines if line.get_linewidth() == 2.4] == [PROCESSOR]


def test_the_colours_differ_in_lightness_for_those_who_see_no_hue() -> None:
    """Weights of luminance: ITU-R recommendation BT.601."""
    ramp = np.array(DEVIATIONS(np.linspace(0, 1, 5)))[:, :3] @ [0.299, 0.587, 0.114]
    assert ramp[0] < ramp[1] - 0.1 < ramp[2] - 0.2
    assert ramp[4] < ramp[3] - 0.1 < ramp[2] - 0.2
