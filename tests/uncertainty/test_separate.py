"""Terms that cannot be told apart are found and named."""

from __future__ import annotations

import numpy as np
import pytest

from sampler.model.basis import Model, ModelTerm, design_blocks, places
from sampler.model.terms import FAMILIES
from sampler.panel.layout import Grid, Layout, Sites
from sampler.uncertainty.information import information
from sampler.uncertainty.separate import in_words, inseparable


def layout(columns=2, rows=2, pitch=(100.0, 100.0)):
    none = Sites.at(np.zeros(0, "U1"), np.zeros((0, 2)))
    outline = np.array([[-150.0, -150], [150, -150], [150, 150], [-150, 150]])
    return Layout("test", 300, 300, outline, 0.0, (Grid("exposure", columns, rows, (90.0, 90.0), pitch),), (), none)


def said(terms, xy, drawn=None):
    model = Model(tuple(terms))
    blocks = design_blocks(model, places(drawn or layout(), xy))
    return in_words(inseparable(information(blocks)), model.names)


def affine(*extra):
    return [ModelTerm(name) for name in (*FAMILIES["affine"], *extra)]


def test_nothing_to_say_of_a_good_model(rng):
    assert said(affine(), rng.uniform(-90, 90, (20, 2))) == []


def test_two_that_act_alike(rng):
    """A rotation common to all cells, read once in each cell at the same place, is a translation."""
    xy = layout().grid("exposure").cell_centres_mm + [10.0, 20.0]
    terms = [ModelTerm("translation_x"), ModelTerm("scale_x"), ModelTerm("translation_x", "exposure")]
    assert said(terms, xy) == ["`translation_x` and `exposure.translation_x` act alike on these candidates: drop one"]


def test_the_issue_example_one_cell_grid(rng):
    drawn = layout(1, 1)
    xy = rng.uniform(-40, 40, (20, 2))
    sentences = said([*affine(), ModelTerm("rotation", "exposure")], xy, drawn)
    assert sentences == ["`rotation` and `exposure.rotation` act alike on these candidates: drop one"]


def test_magnification_with_both_scales(rng):
    (sentence,) = said(affine("magnification"), rng.uniform(-90, 90, (20, 2)))
    assert "`scale_x`" in sentence and "`scale_y`" in sentence and "`magnification`" in sentence
    assert "drop one" in sentence


def test_marks_on_a_line(rng):
    xy = np.stack([np.linspace(-90, 90, 9), np.zeros(9)], axis=1)
    sentences = said(affine(), xy)
    assert len(sentences) == 2
    assert any(sentence.startswith("`scale_y` has no effect") for sentence in sentences)
    assert any(sentence.startswith("`orthogonality` has no effect") for sentence in sentences)


def test_two_relations_are_two_sentences(rng):
    sentences = said([*affine("magnification"), ModelTerm("translation_x", "exposure")],
                     layout().grid("exposure").cell_centres_mm.repeat(3, axis=0) + rng.uniform(-40, 40, (12, 2)))
    assert len(sentences) == 2


@pytest.mark.parametrize("n", [1, 2])
def test_too_few_marks(n, rng):
    assert len(said(affine(), rng.uniform(-90, 90, (n, 2)))) == 6 - 2 * n
