"""FTRL-Proximal keeps far fewer weights than truncation does at the same AUC; how that is counted."""

import numpy as np
import pytest

from tests.evidence.sparsity import Curve, courier_log

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def log(tmp_path_factory):
    return courier_log(tmp_path_factory.mktemp("courier"), "steady", messages=20_000, strengths=12)


def test_at_equal_auc_ftrl_keeps_less_than_a_third_of_what_truncation_keeps(log):
    ftrl = log.best_of("ftrl", (0.2,))
    for method, rates in (("truncated-gradient", (0.02,)), ("forward-backward", (0.2,))):
        other = log.best_of(method, rates)
        auc = min(ftrl.best, other.best) - 0.005
        assert auc > 0.7
        assert 0 < ftrl.kept_at(auc) < other.kept_at(auc) / 3
        assert other.kept_at(auc) < log.live


def test_without_strength_the_plain_pass_predicts_as_ftrl_does(log):
    """With no penalty both are descent with the rates of McMahan et al., KDD 2013."""
    log.grid = (8, 1e12)
    ours, plain = log.best_of("ftrl", (0.1,)), log.best_of("forward-backward", (0.1,))
    assert plain.auc[-1] == pytest.approx(ours.auc[-1], abs=2e-4)
    assert plain.kept[-1] == ours.kept[-1] == log.live


def test_weights_are_interpolated_at_the_auc_on_the_way_to_the_best():
    auc, kept = np.array([0.5, 0.6, 0.7, 0.72, 0.6]), np.array([0, 10, 1_000, 2_000, 9_000])
    curve = Curve(0.1, auc, kept, kept // 2)
    assert curve.best == 0.72
    assert curve.kept_at(0.65) == pytest.approx(100)
    assert curve.kept_at(0.6) != curve.kept_at(0.6), "below it there is no weight to begin from"
    assert curve.kept_at(0.72) == pytest.approx(2_000)
    assert np.isnan(curve.kept_at(0.73))
    assert curve.recent_at(0.65) == 0.5
