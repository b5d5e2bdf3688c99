"""Pooling against published examples of random effects.

Data and results are quoted from memory; every result has been found again from the data with another library
(statsmodels 0.15, `combine_effects`) or, for the restricted likelihood and the last example, by hand.

- BCG: thirteen trials of a vaccine, log risk ratios from the counts. G. A. Colditz et al., Efficacy of BCG vaccine in
  the prevention of tuberculosis, JAMA 271 (1994). Results as in W. Viechtbauer, Conducting meta-analyses in R with the
  metafor package, J. Stat. Software 36 (2010), and that package's documentation.
- SCHOOLS: the effects of coaching in eight schools, which differ by less than their errors. D. B. Rubin, Estimation in
  parallel randomized experiments, J. Educational Statistics 6 (1981); A. Gelman et al., Bayesian Data Analysis,
  section 5.5.
- MEANS: six trials, standardised differences of means. M. Borenstein et al., Introduction to Meta-Analysis (2009),
  chapters 14 and 17.
"""

import numpy as np
import pytest
from scipy import stats

from service.domain.arrays import FloatArray
from service.fleet.between_flights import Nodes, Posterior, posterior, tallies
from service.fleet.pooling import heterogeneity, pool_logs, scatter_of_mean
from tests.reference.printed import agrees

# vaccinated: cases, others; not vaccinated: cases, others
COUNTS = np.array(
    [
        [4, 119, 11, 128],
        [6, 300, 29, 274],
        [3, 228, 11, 209],
        [62, 13536, 248, 12619],
        [33, 5036, 47, 5761],
        [180, 1361, 372, 1079],
        [8, 2537, 10, 619],
        [505, 87886, 499, 87892],
        [29, 7470, 45, 7232],
        [17, 1699, 65, 1600],
        [186, 50448, 141, 27197],
        [5, 2493, 3, 2338],
        [27, 16886, 29, 17825],
    ]
).astype(np.float64)
CASES, TREATED, CONTROL_CASES, CONTROLS = (
    COUNTS[:, 0],
    COUNTS[:, :2].sum(axis=1),
    COUNTS[:, 2],
    COUNTS[:, 2:].sum(axis=1),
)
BCG = np.log(CASES / TREATED / (CONTROL_CASES / CONTROLS))
BCG_U = np.sqrt(1 / CASES - 1 / TREATED + 1 / CONTROL_CASES - 1 / CONTROLS)
SCHOOLS = np.array([28.0, 8.0, -3.0, 7.0, -1.0, 1.0, 18.0, 12.0])
SCHOOLS_U = np.array([15.0, 10.0, 16.0, 11.0, 9.0, 11.0, 10.0, 18.0])
# mean, standard deviation, number: treated, then control
SIX = np.array(
    [
        [94, 22, 60, 92, 20, 60],
        [98, 21, 65, 92, 22, 65],
        [98, 28, 40, 88, 26, 40],
        [94, 19, 200, 82, 17, 200],
        [98, 21, 50, 88, 22, 45],
        [96, 21, 85, 92, 22, 85],
    ]
).astype(np.float64)


def at_tau(log_scale: FloatArray, uncertainty: FloatArray, tau: FloatArray) -> tuple[Posterior, FloatArray]:
    """Posterior over these nodes with an even prior, and weights (n,) at the first."""
    nodes = Nodes(tau, np.zeros(len(tau)), np.append(tau, np.inf))
    each = tallies(log_scale, uncertainty, nodes)
    known = posterior(each.sum(axis=0), nodes)
    return known, each[:, 0, 0] * known.variance[0]


def standardised_differences() -> tuple[FloatArray, FloatArray]:
    """Hedges' g and its standard error."""
    mean, deviation, count, control_mean, control_deviation, control_count = SIX.T
    freedom = count + control_count - 2
    pooled = np.sqrt(((count - 1) * deviation**2 + (control_count - 1) * control_deviation**2) / freedom)
    d = (mean - control_mean) / pooled
    variance = 1 / count + 1 / control_count + d**2 / (2 * (count + control_count))
    correction = 1 - 3 / (4 * freedom - 1)
    return correction * d, correction * np.sqrt(variance)


def test_data_as_printed() -> None:
    printed = ("-0.8893", "-1.5854", "-1.3481", "-1.4416", "-0.2175", "-0.7861", "-1.6209", "0.0120", "-0.4694")
    assert all(agrees(value, figure) for value, figure in zip(BCG, printed, strict=False))
    assert all(agrees(value, figure) for value, figure in zip(BCG_U**2, ("0.3256", "0.1946", "0.4154"), strict=False))


def test_cochran_q() -> None:
    found = heterogeneity(BCG, BCG_U)
    assert agrees(found.statistic, "152.2330")
    assert found.degrees_of_freedom == 12
    assert found.chance < 1e-4
    assert agrees(heterogeneity(*standardised_differences()).statistic, "12.0033")
    schools = heterogeneity(SCHOOLS, SCHOOLS_U)
    assert schools.statistic == pytest.approx(4.6, abs=0.15)
    assert schools.degrees_of_freedom == 7


@pytest.mark.parametrize(
    ("variance", "mean", "standard_error"),
    [
        ("0", "-0.4303", "0.0405"),  # fixed effect
        ("0.30876", "-0.7141", "0.1787"),  # DerSimonian and Laird
        ("0.3132", "-0.7145", "0.1798"),  # restricted maximum likelihood
        ("0.3181", "-0.7150", "0.1809"),  # Paule and Mandel
    ],
)
def test_mean_given_tau(variance: str, mean: str, standard_error: str) -> None:
    known, _ = at_tau(BCG, BCG_U, np.sqrt([float(variance)]))
    assert agrees(known.mean[0], mean)
    assert agrees(np.sqrt(known.variance[0]), standard_error)


def test_restricted_likelihood_peaks_where_it_should() -> None:
    variance = np.arange(0.25, 0.40, 0.0001)
    known, _ = at_tau(BCG, BCG_U, np.sqrt(variance))
    assert agrees(variance[np.argmax(known.weight)], "0.3132")


def test_paule_mandel_makes_the_weighted_scatter_what_it_should_be() -> None:
    """There Hartung and Knapp's standard error is the ordinary one."""
    _, weights = at_tau(BCG, BCG_U, np.sqrt([0.31807]))
    scatter = scatter_of_mean(BCG - weights @ BCG, weights, BCG_U)
    assert agrees(np.sqrt(scatter.shown), "0.1809")


def test_hartung_knapp() -> None:
    """With the restricted likelihood's tau: standard error 0.1808, interval -1.1084 to -0.3206."""
    known, weights = at_tau(BCG, BCG_U, np.sqrt([0.313243]))
    scatter = scatter_of_mean(BCG - weights @ BCG, weights, BCG_U)
    assert agrees(np.sqrt(scatter.shown), "0.1808")
    reach = stats.t.ppf(0.975, 12) * np.sqrt(scatter.shown)
    assert agrees(known.mean[0] - reach, "-1.1084")
    assert agrees(known.mean[0] + reach, "-0.3206")


def test_our_interval_is_all_but_hartung_knapp_with_thirteen() -> None:
    """As fleets: a hundredth of the effects. Our tau is marginalised, and a little of the scatter is spared."""
    pooled = pool_logs(BCG / 100, BCG_U / 100)
    assert 100 * pooled.mean == pytest.approx(-0.7145, abs=0.006)
    assert 100 * np.array(pooled.interval_95) == pytest.approx((-1.1084, -0.3206), abs=0.02)
    assert pooled.between_flights is not None
    assert 100 * pooled.between_flights.value == pytest.approx(np.sqrt(0.3132), abs=0.05)
    # 0.1197 to 1.1115 for the variance by profiling Q, another way to an interval
    low, high = pooled.between_flights.interval_95
    assert 100 * low == pytest.approx(np.sqrt(0.1197), abs=0.06)
    assert 100 * high == pytest.approx(np.sqrt(1.1115), abs=0.2)


def test_eight_schools_that_do_not_differ() -> None:
    known, _ = at_tau(SCHOOLS, SCHOOLS_U, np.zeros(1))
    assert agrees(known.mean[0], "7.7")
    assert agrees(np.sqrt(known.variance[0]), "4.1")
    pooled = pool_logs(SCHOOLS / 1000, SCHOOLS_U / 1000)
    assert pooled.between_flights is not None
    assert pooled.between_flights.interval_95[0] == 0.0


def test_six_trials() -> None:
    effect, error = standardised_differences()
    fixed, _ = at_tau(effect, error, np.zeros(1))
    assert agrees(fixed.mean[0], "0.414")
    assert agrees(fixed.variance[0], "0.0041")
    known, weights = at_tau(effect, error, np.sqrt([0.0373113]))
    assert agrees(known.mean[0], "0.3582")
    assert agrees(known.variance[0], "0.0111")
    assert weights == pytest.approx([0.1576, 0.1628, 0.1270, 0.2316, 0.1385, 0.1824], abs=1e-4)
    # the next trial's effect by Higgins, Thompson and Spiegelhalter, Student's t with k - 2
    reach = stats.t.ppf(0.975, 4) * np.sqrt(0.0373113 + known.variance[0])
    assert agrees(known.mean[0] - reach, "-0.2525")
    assert agrees(known.mean[0] + reach, "0.9690")
