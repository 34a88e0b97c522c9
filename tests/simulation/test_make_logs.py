"""The logs in replay_logs/ are those that their maker makes."""

import importlib.util
import sys
from pathlib import Path
from types import ModuleType

import numpy as np
import pytest

from tracker.engine.panel import unpack
from tracker.logs import LogReader
from tracker.messages import decode_pilots
from tracker.settings import parse
from tracker.simulation.closed_loop import turns
from tracker.simulation.testbed import Testbed

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="module")
def maker() -> ModuleType:
    spec = importlib.util.spec_from_file_location("make_logs", ROOT / "tools" / "make_logs.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    sys.modules["make_logs"] = module  # dataclasses look their module up by name
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize("name", ["quiet-start", "slow-carrier", "blocked-path"])
def test_log_is_whole_small_and_as_its_maker_says(maker: ModuleType, name: str) -> None:
    """Undamaged, below 4 MB, settings that parse, and bursts equal to a new simulation to six digits.

    Frames that sound the pattern in force are left out: which pattern that was rests on the tracker of the day.
    """
    recording = next(one for one in maker.recordings() if one.scenario.name == name)
    path = ROOT / "replay_logs" / f"{name}.mcap"
    assert path.stat().st_size < 4e6
    reader = LogReader(path)
    bursts = [decode_pilots(record.body, "yard", None) for record in reader if record.topic == "pilots/yard"]
    assert reader.damage is None
    assert reader.attachments["settings.toml"].decode() == recording.scenario.settings("yard")
    settings = parse(reader.attachments["settings.toml"].decode())
    assert len(bursts) == round(recording.seconds * recording.scenario.bursts_per_s)
    assert bursts[0].response.shape[1:] == (settings.link.receivers, settings.tones.count)

    testbed = Testbed(recording.scenario.testbed, maker.SEED, run=1, start_ns=maker.START_NS)
    anew = turns(testbed, maker.START_NS, recording.scenario.bursts_per_s, len(bursts))
    sounded = np.arange(maker.FRAMES) % 8 != 0
    scale = np.sqrt(np.mean(np.abs(bursts[0].response) ** 2))
    for logged, turn in zip(bursts, anew, strict=True):
        assert (logged.seq, logged.t_ns, logged.dt_ns) == (turn.burst.seq, turn.burst.t_ns, turn.burst.dt_ns)
        np.testing.assert_array_equal(unpack(logged.patterns, 64)[sounded], unpack(turn.burst.patterns, 64)[sounded])
        np.testing.assert_allclose(logged.response[sounded], turn.burst.response[sounded], rtol=0, atol=1e-5 * scale)
