"""Filter and smoother against published values, closed forms and general-purpose libraries."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import solve_discrete_are

from odograph.behaviour.kalman import kalman_filter, rts_smoother, white_acceleration

# Annual flow of the Nile at Aswan, 1871-1970 (Cobb 1978; in R as `Nile`, in statsmodels as `nile`).
NILE = """
1120 1160 963 1210 1160 1160 813 1230 1370 1140 995 935 1110 994 1020 960 1180 799 958 1140 1100
1210 1150 1250 1260 1220 1030 1100 774 840 874 694 940 833 701 916 692 1020 1050 969 831 726 456 824
702 1120 1100 832 764 821 768 845 864 862 698 845 744 796 1040 759 781 865 845 944 984 897 822 1010
771 676 649 846 812 742 801 1040 860 874 848 890 744 749 838 1050 918 986 797 923 975 815 1020 906
901 1170 912 746 919 718 714 740
"""
NOISE, DRIFT = 15099.0, 1469.1  # Durbin & Koopman, Time Series Analysis by State Space Methods, 2nd ed. 2012


def nile(first_year=0, prior=0.0, prior_variance=1e7):
    """The local-level model: steps of length zero leave the position a random walk."""
    flow = np.array(NILE.split(), float)[first_year:]
    n = len(flow)
    starts = np.arange(n) == 0
    filtered = kalman_filter(
        np.column_stack([flow, flow]),
        np.zeros(n),
        np.tile([DRIFT, 0.0, 0.0], (n, 1)),
        starts,
        prior_xy=(prior, prior),
        prior_variances=(prior_variance, 1.0),
        noise_variance=NOISE,
    )
    return filtered, rts_smoother(filtered, np.zeros(n))


def test_nile_filter_gives_the_values_of_two_other_programs():
    # Own loop and filterpy 2.0.0 (filter and rts_smoother) agree on these to 3e-13.
    filtered, _ = nile()
    level, variance = filtered.updated[:, 0], filtered.updated_cov[:, 0]
    expected = [1118.31146152, 1140.10843916, 1072.31601849, 798.37029261]
    np.testing.assert_allclose(level[[0, 1, 2, 99]], expected, atol=1e-6)
    expected = [15076.23639067, 7894.55753088, 4032.15794181]
    np.testing.assert_allclose(variance[[0, 1, 99]], expected, atol=1e-6)
    assert filtered.predicted_cov[1, 0] == pytest.approx(16545.336390674, abs=1e-6)
    # Both axes carry the same series here, so the likelihood counts it twice.
    assert filtered.log_likelihood / 2 == pytest.approx(-641.5855784594, abs=1e-6)


def test_nile_smoother_gives_the_values_of_two_other_programs():
    _, (state, cov) = nile()
    expected = [1111.22025757, 950.93001202, 829.55045110, 798.37029261]
    np.testing.assert_allclose(state[[0, 28, 50, 99], 0], expected, atol=1e-6)
    np.testing.assert_allclose(cov[[0, 50], 0], [4030.53276734, 2326.75686981], atol=1e-6)


def test_nile_likelihood_after_a_diffuse_start():
    # Given the first year, 1120; statsmodels' exact diffuse likelihood is this minus log(2 pi) / 2.
    filtered, _ = nile(first_year=1, prior=1120.0, prior_variance=NOISE + DRIFT)
    log_likelihood = filtered.log_likelihood / 2
    assert log_likelihood == pytest.approx(-632.545625, abs=1e-6)
    assert log_likelihood - 0.5 * np.log(2 * np.pi) == pytest.approx(-633.464563649, abs=1e-6)


def test_nile_reaches_the_steady_state():
    # P = (Q + sqrt(Q^2 + 4 Q H)) / 2, closed form.
    filtered, _ = nile()
    steady = (DRIFT + np.sqrt(DRIFT**2 + 4 * DRIFT * NOISE)) / 2
    assert steady == pytest.approx(5501.257941808, abs=1e-8)
    assert filtered.predicted_cov[99, 0] == pytest.approx(steady, abs=1e-6)


def still_target(n, step, process):
    starts = np.arange(n) == 0
    steps = np.full(n, step)
    filtered = kalman_filter(
        np.zeros((n, 2)),
        steps,
        np.tile(process, (n, 1)),
        starts,
        prior_xy=(0.0, 0.0),
        prior_variances=(1.0, 1.0),
        noise_variance=0.002**2,
    )
    return filtered, steps, starts


def test_constant_velocity_tracker_has_the_closed_form_gains():
    # Kalata, IEEE Trans. AES 20:174 (1984): tracking index T^2 sigma_a / sigma = 0.3.
    step, sd, acceleration = 0.02, 0.002, 1.5
    process = acceleration**2 * np.array([step**4 / 4, step**3 / 2, step**2])
    filtered, _, _ = still_target(2000, step, process)
    index = step**2 * acceleration / sd
    r = (4 + index - np.sqrt(8 * index + index**2)) / 4
    alpha = 1 - r**2
    beta = 2 * (2 - alpha) - 4 * np.sqrt(1 - alpha)
    assert (alpha, beta) == pytest.approx((0.5369106938, 0.2041519962), abs=1e-9)
    variance, covariance, _ = filtered.predicted_cov[-1]
    assert variance / (variance + sd**2) == pytest.approx(alpha, abs=1e-9)
    assert covariance / (variance + sd**2) == pytest.approx(beta / step, abs=1e-7)
    assert filtered.updated_cov[-1, 0] == pytest.approx(2.147642775e-6, rel=1e-8)


def test_constant_velocity_tracker_solves_the_riccati_equation():
    step, sd = 0.02, 0.002
    noise = white_acceleration(np.array([step]), 0.04)[0]
    filtered, _, _ = still_target(3000, step, noise)
    transition = np.array([[1.0, step], [0.0, 1.0]])
    process = np.array([[noise[0], noise[1]], [noise[1], noise[2]]])
    steady = solve_discrete_are(transition.T, np.array([[1.0], [0.0]]), process, np.array([[sd**2]]))
    expected = [steady[0, 0], steady[0, 1], steady[1, 1]]
    np.testing.assert_allclose(filtered.predicted_cov[-1], expected, rtol=1e-8)


def test_smoother_equals_the_conditional_normal_distribution():
    # All states at once as one normal distribution, conditioned on the measurements by linear algebra.
    rng = np.random.default_rng(1)
    n, noise, intensity = 14, 0.01**2, 0.5
    step = rng.uniform(0.01, 0.2, n)
    process = white_acceleration(step, intensity)
    measured = np.cumsum(rng.standard_normal((n, 2)) * 0.05, axis=0)
    measured[[3, 4, 9]] = np.nan
    starts = np.arange(n) == 0
    filtered = kalman_filter(
        measured,
        step,
        process,
        starts,
        prior_xy=(0.1, -0.2),
        prior_variances=(0.3, 0.7),
        noise_variance=noise,
    )
    state, cov = rts_smoother(filtered, step)

    size = 2 * n
    joint = np.zeros((size, size))
    joint[:2, :2] = np.diag([0.3, 0.7])
    for i in range(1, n):
        move = np.array([[1.0, step[i]], [0.0, 1.0]])
        q = np.array([[process[i, 0], process[i, 1]], [process[i, 1], process[i, 2]]])
        here, before = slice(2 * i, 2 * i + 2), slice(2 * i - 2, 2 * i)
        joint[here, : 2 * i] = move @ joint[before, : 2 * i]
        joint[: 2 * i, here] = joint[here, : 2 * i].T
        joint[here, here] = move @ joint[before, before] @ move.T + q
    seen = 2 * np.flatnonzero(np.isfinite(measured[:, 0]))
    gain = joint[:, seen] @ np.linalg.inv(joint[np.ix_(seen, seen)] + noise * np.eye(len(seen)))
    posterior = joint - gain @ joint[seen]
    for axis, prior in ((0, 0.1), (1, -0.2)):
        mean = np.zeros(size)
        mean[::2] = prior
        mean = mean + gain @ (measured[seen // 2, axis] - prior)
        np.testing.assert_allclose(state[:, axis], mean[::2], atol=1e-9)
        np.testing.assert_allclose(state[:, 2 + axis], mean[1::2], atol=1e-8)
    np.testing.assert_allclose(cov[:, 0], np.diag(posterior)[::2], rtol=1e-7)
    np.testing.assert_allclose(cov[:, 2], np.diag(posterior)[1::2], rtol=1e-7)


def test_the_gate_refuses_a_jump_and_nothing_else():
    rng = np.random.default_rng(2)
    n, sd = 400, 0.002
    time = np.arange(n) * 0.02
    path = np.column_stack([0.3 * time, 0.1 * np.sin(time)])
    measured = path + sd * rng.standard_normal((n, 2))
    measured[200:203] += 0.2
    step = np.full(n, 0.02)
    filtered = kalman_filter(
        measured,
        step,
        white_acceleration(step, 0.05),
        np.arange(n) == 0,
        prior_xy=(0.0, 0.0),
        prior_variances=(1.0, 1.0),
        noise_variance=sd**2,
        gate_sd=6.0,
    )
    assert np.flatnonzero(filtered.refused).tolist() == [200, 201, 202]
    assert filtered.accepted.sum() == n - 3


def test_a_start_forgets_what_was_before():
    n = 50
    step = np.full(n, 0.02)
    measured = np.vstack([np.zeros((25, 2)), np.full((25, 2), 5.0)])
    whole = {"prior_xy": (2.0, 2.0), "prior_variances": (10.0, 1.0), "noise_variance": 1e-6}
    noise = white_acceleration(step, 0.05)
    starts = np.isin(np.arange(n), [0, 25])
    both = kalman_filter(measured, step, noise, starts, **whole)
    second = kalman_filter(measured[25:], step[25:], noise[25:], starts[25:], **whole)
    np.testing.assert_array_equal(both.updated[25:], second.updated)
    state, _ = rts_smoother(both, step)
    np.testing.assert_allclose(state[:25, 0], 0.0, atol=1e-4)
    np.testing.assert_allclose(state[25:, 0], 5.0, atol=1e-4)


def test_a_prediction_that_ran_astray_does_not_refuse_for_ever():
    # Lost for 0.44 s while it stopped from 1 m/s: the prediction runs on and would outrun its own gate.
    n = 300
    step = np.full(n, 0.02)
    x = np.minimum(np.arange(n) * 0.02, 2.0)
    measured = np.column_stack([x, np.zeros(n)])
    measured[100:122] = np.nan
    given = {"prior_xy": (0.0, 0.0), "prior_variances": (1.0, 1.0), "noise_variance": 1e-6, "gate_sd": 6.0}
    noise = white_acceleration(step, 0.001)
    stubborn = kalman_filter(measured, step, noise, np.arange(n) == 0, **given)
    patient = kalman_filter(measured, step, noise, np.arange(n) == 0, patience_s=0.3, **given)
    assert stubborn.refused[122:].sum() > 20
    assert not patient.refused[122:].any()
    assert np.flatnonzero(patient.starts).tolist() == [0, 122]
