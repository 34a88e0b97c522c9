"""The smoother, held against a general-purpose library and against the posterior written out at once."""

import filterpy.kalman
import numpy as np
import pytest

from tracker.offline.smoothing import Seen, smooth

SIZE, CONSTANT_S = 3, 0.2
VARIANCES = np.array([2.0, 0.5, 0.1])


def stretches(outputs: int, gap: int = 4) -> list[Seen]:
    """Stretches at uneven times, of differing length, one of them not to be used."""
    rng = np.random.default_rng(3)

    def gaussian(*shape: int) -> np.ndarray:
        return rng.normal(size=shape) + 1j * rng.normal(size=shape)

    times = np.cumsum(rng.uniform(0.01, 0.1, 9))
    return [
        Seen(float(time), gaussian(length, SIZE), gaussian(length, outputs), number != gap)
        for number, (time, length) in enumerate(zip(times, (4, 2, 6, 1, 5, 3, 2, 7, 4), strict=True))
    ]


def test_it_is_the_smoother_of_rauch_tung_and_striebel() -> None:
    """Real values and one output: filterpy's Kalman filter and `rts_smoother` give the same means and covariances."""
    real = [
        Seen(one.time_s, np.asarray(one.regressors.real + 0j), one.outputs.real + 0j, one.used) for one in stretches(1)
    ]
    track = smooth(real, VARIANCES, CONSTANT_S)
    peer = filterpy.kalman.KalmanFilter(dim_x=SIZE, dim_z=1)
    peer.x, peer.P = np.zeros((SIZE, 1)), np.diag(VARIANCES)
    means, covariances, steps, noises = [], [], [], []
    before = real[0].time_s
    for one in real:
        kept = np.exp(-(one.time_s - before) / CONSTANT_S)
        before = one.time_s
        steps.append(kept * np.eye(SIZE))
        noises.append((1.0 - kept**2) * np.diag(VARIANCES))
        peer.predict(F=steps[-1], Q=noises[-1])
        if one.used:
            # Frames of a stretch are independent, so they can be taken in one by one.
            for row, output in zip(one.regressors.real, one.outputs.real, strict=True):
                peer.update(output, R=np.eye(1), H=row[None, :])
        means.append(peer.x.copy())
        covariances.append(peer.P.copy())
    wanted, spread, _, _ = peer.rts_smoother(np.array(means), np.array(covariances), Fs=steps, Qs=noises)
    np.testing.assert_allclose(np.array(track.means), wanted, atol=1e-10)
    np.testing.assert_allclose(np.array(track.covariances), spread, atol=1e-10)


def test_it_is_the_posterior_given_all_frames() -> None:
    """Complex values, several outputs: the mean and covariance of the joint Gaussian, solved at once, are the same."""
    seen = stretches(4)
    track = smooth(seen, VARIANCES, CONSTANT_S)
    times = np.array([one.time_s for one in seen])
    kept = np.exp(-np.abs(times[:, None] - times) / CONSTANT_S)
    prior = np.kron(kept, np.diag(VARIANCES))
    used = [number for number, one in enumerate(seen) if one.used]
    z = np.zeros((sum(seen[number].regressors.shape[0] for number in used), prior.shape[0]), dtype=np.complex128)
    row = 0
    for number in used:
        own = seen[number].regressors
        z[row : row + own.shape[0], number * SIZE : (number + 1) * SIZE] = own
        row += own.shape[0]
    gain = prior @ z.conj().T @ np.linalg.inv(np.eye(row) + z @ prior @ z.conj().T)
    mean = gain @ np.concatenate([seen[number].outputs for number in used])
    spread = prior - gain @ z @ prior
    for number in range(len(seen)):
        part = slice(number * SIZE, (number + 1) * SIZE)
        np.testing.assert_allclose(track.means[number], mean[part], atol=1e-10)
        np.testing.assert_allclose(track.covariances[number], spread[part, part], atol=1e-10)


def test_forward_alone_rests_on_the_past() -> None:
    """Without the way back, what comes later does not count; at the last stretch it makes no difference."""
    seen = stretches(2)
    forward = smooth(seen, VARIANCES, CONSTANT_S, backward=False)
    early = smooth(seen[:5], VARIANCES, CONSTANT_S, backward=False)
    both = smooth(seen, VARIANCES, CONSTANT_S)
    np.testing.assert_allclose(np.array(forward.means[:5]), np.array(early.means), atol=1e-12)
    np.testing.assert_allclose(forward.means[-1], both.means[-1], atol=1e-12)
    assert not np.allclose(forward.means[0], both.means[0])


def test_the_error_counts_the_noise() -> None:
    """Frames of nothing but unit noise are predicted with an error near 1, whatever the prior makes of them."""
    rng = np.random.default_rng(8)
    seen = [
        Seen(
            0.01 * number,
            np.asarray(rng.choice([-1.0, 1.0], (16, SIZE)) + 0j),
            (rng.normal(size=(16, 5)) + 1j * rng.normal(size=(16, 5))) / np.sqrt(2.0),
        )
        for number in range(200)
    ]
    # 16 000 complex values of unit power: a standard deviation of 0.8 %.
    assert smooth(seen, 1e-6 * VARIANCES, CONSTANT_S).error == pytest.approx(1.0, abs=0.032)
