"""Laws of the scores, in both tails."""

import numpy as np
import pytest
from scipy import special

from service.risk.scores import NormalScores, Scores, StudentScores, UniformScores, normal_scores

LAWS = [NormalScores(), StudentScores(3.0), StudentScores(0.5), UniformScores()]


@pytest.mark.parametrize("law", LAWS, ids=repr)
def test_both_tails_are_accurate_and_belong_together(law):
    scores = np.array([-30.0, -5.0, -0.1, 0.0, 0.1, 5.0, 30.0])
    np.testing.assert_allclose(law.lower(scores) + law.upper(scores), 1.0, rtol=0.0, atol=4e-16)
    np.testing.assert_array_equal(law.lower(-scores), law.upper(scores))
    assert np.all(law.upper(scores) > 0.0)
    assert np.all(np.diff(law.lower(scores[:4])) > 0.0)


@pytest.mark.parametrize("law", LAWS, ids=repr)
def test_normal_scores_have_the_same_probabilities(law):
    scores = np.array([-30.0, -5.0, -0.1, 0.1, 5.0, 30.0])
    np.testing.assert_allclose(special.ndtr(law.normal(scores)), law.lower(scores), rtol=1e-13)
    np.testing.assert_allclose(special.ndtr(-law.normal(scores)), law.upper(scores), rtol=1e-13)


def test_logits_keep_probabilities_that_doubles_can_hardly_hold():
    law, far = UniformScores(), np.array([700.0])
    assert 0.0 < law.upper(far)[0] < 1e-303
    assert np.isfinite(law.normal(far)[0])
    assert law.normal(far)[0] > 37.0


def test_normal_scores_of_all_factors():
    values = np.asfortranarray([[0.3, 0.3, 0.3], [-2.0, -2.0, -2.0]])
    found = normal_scores(Scores(values, (NormalScores(), StudentScores(4.0), UniformScores())))
    np.testing.assert_array_equal(found[:, 0], values[:, 0])
    np.testing.assert_allclose(found[:, 2], special.ndtri(special.expit(values[:, 2])), rtol=1e-14)
    assert np.all(np.abs(found[1, 1:]) < 2.0)
