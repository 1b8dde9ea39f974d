"""This package against terrains with exact answers; the peers' answers are in the page of docs/."""

import numpy as np
import pytest
from conformance.kit import GROUNDS, Ground, Question, Routed, answers, basinwright, embankment, valley
from conformance.scores import AZIMUTHS, kept, length_errors, oblique_valley


@pytest.mark.parametrize("ground", GROUNDS, ids=lambda ground: ground.name)
def test_exact_answers(ground):
    (given,) = answers(basinwright, [ground]).values()
    shown = kept()["basinwright"]["answers"][ground.name]
    assert {question.text for question in ground.questions if not question.right(given[question.text])} == set()
    assert {question.text for question in ground.questions if not question.right(shown[question.text])} == set(), (
        "the page of docs/ shows old answers: run make docs"
    )


def test_filling_crosses_an_embankment_at_its_sag():
    (given,) = answers(lambda ground: basinwright(ground, "fill"), [embankment(0.5)]).values()
    assert given["path off the valley's axis where it crosses, cells"] == 10


def test_the_kit_notices_what_is_wrong():
    """A router that sends everything to the east, one that goes round in circles, one that fails."""

    def east(ground):
        index = np.arange(ground.elevation_m.size).reshape(ground.elevation_m.shape)
        down = index + 1
        down[:, -1] = -1
        return Routed(down, np.full(down.shape[0], 100.0))

    def circles(ground):
        down = np.arange(ground.elevation_m.size).reshape(ground.elevation_m.shape) ^ 1
        return Routed(down, np.full(down.shape[0], 100.0))

    def fails(ground):
        raise ValueError("no")

    ground = valley()
    for router in (east, circles, fails):
        (given,) = answers(router, [ground]).values()
        assert not all(question.right(given[question.text]) for question in ground.questions)
    assert given["area at the outlet, km2"] == "failed: ValueError: no"


def test_a_question_forgives_no_more_than_it_says():
    question = Question("length, m", 10.0, lambda _ground, _routed: 0.0, 0.5)
    assert [question.right(answer) for answer in (9.5, 10.6, None, "failed")] == [True, False, False, False]
    assert not Ground("g", "", np.zeros((2, 2)), ()).mapped


@pytest.mark.parametrize("azimuth", AZIMUTHS)
def test_corrected_lengths_are_true_along_valleys(azimuth):
    raw, _, corrected = length_errors(oblique_valley(azimuth), azimuth, (60, 60))
    off = np.radians(min(azimuth - 90, 135 - azimuth))
    assert raw == pytest.approx(100 * (np.cos(off) + np.tan(np.pi / 8) * np.sin(off) - 1), abs=0.8)  # by geometry
    assert abs(corrected) < 0.3
