"""Order-statistic intervals, sample sizes and standard errors against binomial tables and asymptotic theory."""

import numpy as np
import pytest

from service.risk.quantiles import order_statistic_ranks
from tests.reference.laws import rows
from tests.unit.risk.arithmetic import es, total, var


@pytest.mark.parametrize("row", rows("m_order_stat_ci"), ids=lambda row: f"{row['n']}-{row['p']}")
def test_interval_of_a_quantile(row):
    """Source: exact binomial probabilities (mark: own); the construction is common practice."""
    n, level = int(row["n"]), float(row["p"])
    low, high, coverage = order_statistic_ranks(n, level, 0.95)
    assert low == int(row["lower_rank_l"])
    assert high == (int(row["upper_rank_u"]) if row["upper_rank_u"] else n + 1)
    if row["exact_coverage_two_sided"]:
        assert coverage == pytest.approx(float(row["exact_coverage_two_sided"]), abs=5.1e-11)
        _, one_sided, _ = order_statistic_ranks(n, level, 0.9)  # 5 % above
        assert one_sided == int(row["upper_rank_one_sided_95"])


@pytest.mark.parametrize("row", rows("m_wilks_sample_sizes"), ids=lambda row: f"{row['content_p']}-{row['confidence']}")
def test_sample_sizes_of_wilks(row):
    """Fewest draws whose r-th largest is an upper bound of the quantile with the given confidence.

    Source: Wilks, Annals of Mathematical Statistics 12 (1941) 91-96; sizes for 95/95, 95/99, 99/95 and 99/99 recalled
    (mark: memory), the others exact (own). The interval's upper rank is n - r + 1 or lower from that size on.
    """
    level, confidence = float(row["content_p"]), float(row["confidence"])
    for r, column in enumerate(("n_max", "n_2nd_largest", "n_3rd_largest", "n_4th_largest"), start=1):
        n = int(row[column])
        assert order_statistic_ranks(n, level, 2.0 * confidence - 1.0)[1] <= n - r + 1
        assert order_statistic_ranks(n - 1, level, 2.0 * confidence - 1.0)[1] > n - r


SAMPLES = 200


def _draws(law, rng, n):
    return rng.normal(size=n) if law == "normal" else rng.standard_t(float(law[1:]), size=n)


# The stated error estimates an asymptotic one from a sample. Laws are taken whose fourth moment beyond the quantile
# exists with room to spare: the variance estimate behind a tail mean of t3 or t4 has itself an infinite variance, and
# its mean over any number of samples says nothing.
ERRORS = [row for row in rows("m_asymptotic_se") if row["distribution"] in ("normal", "t10")]


@pytest.mark.parametrize("row", ERRORS, ids=lambda row: f"{row['distribution']}-{row['level']}")
def test_stated_errors_are_the_asymptotic_ones(row):
    """Source: sqrt(p(1-p))/f(q) for the quantile; sqrt((Var(X | X > q) + p (ES - q)^2)/(1-p)) for the tail mean
    (Manistre and Hancock, North American Actuarial J. 9(2), 2005, 129-156; formula from memory, figures own).

    Seeds are fixed: 200 samples of 20,000 draws. The spread of a stated error over samples is below 15.5 % (quantile:
    the width of an interval of order statistics) and 9 % (tail mean): 4 standard errors of their mean are 4.4 % and
    2.6 %, and a bound of 5 % raises a false alarm with a probability below 6e-5 as long as the bias is within the rest.
    """
    n, level = 20_000, float(row["level"])
    rng = np.random.default_rng(20)
    samples = [_draws(row["distribution"], rng, n) for _ in range(SAMPLES)]
    for one, column in ((var(level), "sqrt_n_se_var"), (es(level), "sqrt_n_se_es")):
        stated = np.array([total(one, sample, stand_alone=False).standard_errors[0] for sample in samples])
        assert np.sqrt(n) * stated.mean() == pytest.approx(float(row[column]), rel=0.05)


@pytest.mark.parametrize("law", ["t3", "t4", "t5"])
def test_order_statistic_errors_of_heavy_tails(law):
    """Source and false alarms as above; a quantile's error needs no moments."""
    n, rng = 20_000, np.random.default_rng(21)
    samples = [_draws(law, rng, n) for _ in range(SAMPLES)]
    for row in (row for row in rows("m_asymptotic_se") if row["distribution"] == law):
        stated = [total(var(float(row["level"])), sample, stand_alone=False).standard_errors[0] for sample in samples]
        assert np.sqrt(n) * np.mean(stated) == pytest.approx(float(row["sqrt_n_se_var"]), rel=0.05)
