"""The alarm's tests against general libraries for change points, on an open series and sample by sample.

Series: annual flow of the Nile at Aswan, 1871 to 1970, 10⁸ m³, which falls after 1898 (Cobb, Biometrika 65, 1978), as
statsmodels ships it. Libraries: ruptures (offline segmentation; Truong, Oudre & Vayatis, Signal Processing 167, 2020)
and river (streams; Montiel et al., J. Machine Learning Research 22, 2021).
"""

from typing import Any

import numpy as np
import pytest
import ruptures
import statsmodels.api as sm
from numpy.typing import NDArray
from river import drift as streams

from tracker.engine.detection.cusum import Cusum
from tracker.engine.detection.drift import WARM_UP, Watch

# Years of the first level, of which its mean and deviation are taken.
BASELINE = 28
Real = NDArray[np.float64]


def _nile() -> tuple[Real, NDArray[np.int64]]:
    data = sm.datasets.nile.load_pandas().data
    return data["volume"].to_numpy(dtype=np.float64), data["year"].to_numpy().astype(np.int64)


def _standardised(flow: Real) -> Real:
    before = flow[:BASELINE]
    return np.asarray((flow - before.mean()) / before.std(ddof=1))


def _first_alarm(values: Real, threshold: float, slack: float = 0.5) -> tuple[int, int, bool]:
    """Index of the first alarm, index since which the sum has been raised, and whether upwards."""
    test = Cusum(threshold, slack)
    for index, value in enumerate(values.tolist()):
        change = test.update(value)
        if change is not None:
            return index, index + 1 - change.since, change.up
    raise AssertionError("no alarm")


@pytest.mark.parametrize("threshold", [4.0, 5.0])
@pytest.mark.parametrize("search", [ruptures.Dynp, ruptures.Binseg, ruptures.Window])
def test_change_is_dated_as_offline_segmentation_dates_it(threshold: float, search: type) -> None:
    """The alarm dates the change of the Nile to 1899, the first year of the second segment of every search of ruptures.

    Least squares, one change; the window's search may be off by a year, as it looks at twenty years at a time.
    """
    flow, years = _nile()
    options = {"width": 20} if search is ruptures.Window else {"min_size": 5}
    begins = search(model="l2", jump=1, **options).fit(flow).predict(n_bkps=1)[0]
    _, since, up = _first_alarm(_standardised(flow), threshold)
    assert not up
    assert years[since] == 1899
    assert abs(since - begins) <= (1 if search is ruptures.Window else 0)


def test_penalised_search_finds_the_same_change_and_no_other() -> None:
    """PELT of ruptures, penalty 2 σ² ln n (Yao, Stat. Prob. Letters 6, 1988), finds one change, where the alarm does.

    After it, on the baseline of the second level, the alarm's test is silent to the end as well.
    """
    flow, _ = _nile()
    spread = flow[:BASELINE].var(ddof=1)
    begins = ruptures.Pelt(model="l2", jump=1).fit(flow).predict(pen=4.0 * spread * np.log(flow.size))
    _, since, _ = _first_alarm(_standardised(flow), 5.0)
    assert begins == [since, flow.size]
    after = flow[since:]
    test = Cusum(5.0)
    level = (after - after.mean()) / after.std(ddof=1)
    assert [test.update(value) for value in level.tolist()] == [None] * after.size


@pytest.mark.parametrize(("slack", "threshold"), [(0.5, 5.0), (0.25, 8.0), (2.0, 3.0)])
def test_statistic_is_that_of_page_and_hinkley(slack: float, threshold: float) -> None:
    """river's Page-Hinkley test, not forgetting, alarms at the same samples: it is a CUSUM about the running mean.

    Both are given 20 000 normal values whose mean moves every 500 samples; after an alarm both begin anew. Upwards and
    downwards, every alarm comes at the same sample.
    """
    rng = np.random.default_rng(1)
    values = rng.normal(size=20_000) + np.repeat(rng.normal(scale=1.5, size=40), 500)
    theirs: Any = streams.PageHinkley(min_instances=1, delta=slack, threshold=threshold, alpha=1.0, mode="both")
    ours = Cusum(threshold, slack)
    mean, count = 0.0, 0
    alarms: list[list[int]] = [[], []]
    for index, value in enumerate(values.tolist()):
        theirs.update(value)
        count += 1
        mean += (value - mean) / count
        if theirs.drift_detected:
            alarms[0].append(index)
        if ours.update(value - mean) is not None:
            alarms[1].append(index)
            ours.reset()
            mean, count = 0.0, 0
    assert alarms[0] == alarms[1]
    assert len(alarms[0]) >= 20


@pytest.mark.parametrize("mode", ["up", "down"])
def test_one_sided_statistic_is_that_of_page_and_hinkley(mode: str) -> None:
    """On the Nile about the running mean, river's one-sided test and that side of ours stop in the same year."""
    flow, _ = _nile()
    level = _standardised(flow) * (1.0 if mode == "down" else -1.0)
    theirs: Any = streams.PageHinkley(min_instances=1, delta=0.5, threshold=4.0, alpha=1.0, mode=mode)
    stops = []
    for index, value in enumerate(level.tolist()):
        theirs.update(value)
        if theirs.drift_detected:
            stops.append(index)
            break
    running = level - np.cumsum(level) / np.arange(1, level.size + 1)
    index, _, up = _first_alarm(running, 4.0)
    assert up == (mode == "up")
    assert stops == [index]


def test_adaptive_windows_find_what_the_watch_finds_and_later() -> None:
    """A mean that steps by two deviations: the watch alarms before river's ADWIN, and neither does before the step.

    ADWIN (Bifet & Gavaldà, SIAM Data Mining 2007) compares windows of any length without knowing the values' law, at a
    confidence of 0.002; the watch knows the law, and is set to far rarer false alarms, one in 100 000 samples.
    """
    delays: list[list[int]] = [[], []]
    for seed in range(10):
        rng = np.random.default_rng([2, seed])
        values = rng.normal(size=2000)
        step = 1500
        values[step:] += 2.0
        adaptive: Any = streams.ADWIN
        theirs = adaptive(delta=0.002, clock=1)
        watch = Watch(100_000.0)
        found: list[int | None] = [None, None]
        for index, value in enumerate(values.tolist()):
            theirs.update(value)
            alarmed = watch.update(value, 0, 1.0) is not None, bool(theirs.drift_detected)
            for which, alarm in enumerate(alarmed):
                if alarm and found[which] is None:
                    found[which] = index
        for which, at in enumerate(found):
            assert at is not None
            assert at >= step > WARM_UP
            delays[which].append(at - step)
    assert np.median(delays[0]) < np.median(delays[1]) < 100
