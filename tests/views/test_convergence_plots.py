"""Pictures of convergence studies say what the studies say."""

from __future__ import annotations

import numpy as np
import pytest

import anneal_ref as ar
from anneal_ref.judgement.growth import fit_growth
from anneal_ref.views.convergence_plots import (
    bond_dimension_growth,
    convergence_errors,
    convergence_figure,
    matching_bond_dimensions,
)

RAMP = ar.Schedule.polynomial(transverse=(5, -10, 5), problem=(0, 5))


@pytest.fixture(scope="module")
def study():
    instance = ar.draw_instance(ar.lattices.square(3, 3), ar.disorder.plus_minus(), seed=2)
    return ar.converge(ar.Anneal(instance, RAMP, 1.0), (2, 4, 8, 16))


@pytest.mark.parametrize("against", ["bond_dimension", "discarded_weight", "seconds"])
@pytest.mark.parametrize("quantity", ["correlation_error", "largest", "energy", "q2"])
def test_errors_are_drawn_against_every_cost(study, against, quantity):
    ax = convergence_errors(study, against, quantity)
    ax.figure.canvas.draw()
    assert (ax.get_xscale(), ax.get_yscale()) == ("log", "log")
    drawn = np.concatenate([line.get_xydata() for line in ax.lines if line.get_linestyle() in ("-", "--")])
    errors = study.error(quantity)
    for k, rung in enumerate(study.rungs[:-1]):
        x = float(getattr(rung, against))
        if x > 0 and errors[k] > 0:
            assert np.any(np.all(np.isclose(drawn, (x, errors[k])), axis=1))
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert labels[:2] == ["step as given", "1/2 of the step"]


def test_known_errors_are_full_and_others_open(study):
    ax = convergence_errors(study)
    full = sum(len(line.get_xdata()) for line in ax.lines if line.get_markerfacecolor() not in ("white", "none")
               and line.get_linestyle() == "None")  # fmt: skip
    open_ = sum(len(line.get_xdata()) for line in ax.lines if line.get_markerfacecolor() == "white")
    known = study.resolved() & (study.error() > 0)
    assert full == known.sum()
    assert open_ == (study.error() > 0).sum() - known.sum()


def test_figure_of_three(study):
    figure = convergence_figure(study, "square")
    figure.canvas.draw()
    assert [ax.get_xlabel() for ax in figure.axes] == ["bond dimension", "discarded weight", "wall time of a run (s)"]
    assert figure.get_suptitle() == "square"


def test_bad_names(study):
    with pytest.raises(ar.InputError, match="against must be one of"):
        convergence_errors(study, "second")
    with pytest.raises(ar.InputError, match="quantity must be one of"):
        convergence_errors(study, quantity="eps")


def test_matching_and_growth(study):
    samples = ar.MPS(bond_dimension=4).evolve(study.anneal).sample(20000, seed=1)
    matching = ar.matching_bond_dimension(study, samples)
    ax = matching_bond_dimensions(matching)
    ax.figure.canvas.draw()
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert f"matching bond dimension {matching.bond_dimension:.3g}" in labels
    outside = ar.matching_bond_dimension(study, ar.StateVector().evolve(study.anneal).sample(200, seed=2))
    if outside.outcome != "matched":
        matching_bond_dimensions(outside).figure.canvas.draw()
    growth = fit_growth([matching] * 3, sizes=[1, 2, 3])
    ax = bond_dimension_growth(growth, up_to=5)
    ax.figure.canvas.draw()
    assert ax.get_title(loc="left") == "the data cannot tell the two apart"


def test_they_are_had_from_plots():
    assert ar.plots.convergence_errors is convergence_errors
    assert "matching_bond_dimensions" in ar.plots.__all__
