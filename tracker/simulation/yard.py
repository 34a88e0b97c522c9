"""The container yard of the demo: an invented place, with real sizes.

A gateway mast overlooks the yard. Straddle carriers work a lane that lies in the shadow of a block of stacked
containers, where the mast's wave arrives weakly around the edges. A surface on top of another stack sees both the
mast and the lane. x runs east, y north, z up, in metres.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from tracker.simulation.config import DirectConfig, SceneConfig, Terminal, ToneGrid
from tracker.simulation.geometry import PanelConfig, Scatterer, Wall
from tracker.simulation.motion import Still, Sway, Track, Waypoints
from tracker.simulation.schedule import NEVER, Block, Episode
from tracker.simulation.testbed import TestbedConfig

MAST = (0.0, 0.0, 22.0)
SURFACE = (38.0, 32.0, 11.0)
FACING = (0.1, -1.0, 0.0)  # sees mast and lane, but is no mirror between them
LANE_X = 58.0
ANTENNA_Z = 5.0

GROUND = Wall(point=(0.0, 0.0, 0.0), normal=(0.0, 0.0, 1.0), loss_db=8.0)
EAST_STACK = Wall(point=(72.0, 0.0, 0.0), normal=(-1.0, 0.0, 0.0), loss_db=4.0, hops=("out",))
CRANE_LEG = Scatterer(Still((25.0, 18.0, 8.0)), cross_section_m2=20.0, hops=("in",))


@dataclass(frozen=True, slots=True)
class Scenario:
    """A named scene of the yard with the settings that a tracker needs for it.

    Parameters
    ----------
    name, text : str
        Its name, and what happens in it.
    testbed : TestbedConfig
    bursts_per_s : float
        Pace of the bursts.
    time_constant_ms : float
        For the tracker: how fast its estimate forgets.
    follow_phase : bool
        For the tracker: whether phase is to be followed.
    """

    name: str
    text: str
    testbed: TestbedConfig
    bursts_per_s: float = 100.0
    time_constant_ms: float = 500.0
    follow_phase: bool = False

    @property
    def config(self) -> SceneConfig:
        """The scene."""
        return self.testbed.scene

    def settings(
        self,
        link: str = "yard",
        pilots: str = "tcp://127.0.0.1:5600",
        publish: str = "tcp://127.0.0.1:5601",
        control: str = "tcp://127.0.0.1:5602",
        journal: str = "journal",
    ) -> str:
        """Write the tracker's settings for this scene as TOML."""
        scene = self.config
        return f"""\
# Container yard, scene "{self.name}": {self.text}
[link]
name = "{link}"
receivers = {scene.receivers}

[panel]
columns = {scene.panel.columns}
rows = {scene.panel.rows}

[tones]
fft = {scene.tones.fft}
first = {scene.tones.first}
count = {scene.tones.count}
spacing_khz = {scene.tones.spacing_hz / 1e3}

[delay]
taps = 16
before = 1

[estimator]
time_constant_ms = {float(self.time_constant_ms)}

[follow]
phase = {str(self.follow_phase).lower()}

{self._sounding()}[sockets]
pilots = "{pilots}"
publish = "{publish}"
control = "{control}"

[journal]
folder = "{journal}"
"""

    def _sounding(self) -> str:
        """Write the table of the sounding plan, for a testbed that obeys one."""
        testbed = self.testbed
        if not testbed.obeys:
            return ""
        return f"""\
[sounding]
plan = true
frame_us = {testbed.frame_ns / 1e3}
most_frames = {testbed.frames}
most_share = 0.25
in_service = true
least_service = {testbed.least_service}

"""


def lane(*norths: float) -> tuple[tuple[float, float, float], ...]:
    """Points of the lane at these y."""
    return tuple((LANE_X, north, ANTENNA_Z) for north in norths)


def yard(tracks: tuple[Track, ...], shadow_db: float, snr_db: float, columns: int = 16, rows: int = 16) -> SceneConfig:
    """Build the yard with carriers on these tracks.

    Parameters
    ----------
    tracks : tuple of Track
        One carrier with one antenna each.
    shadow_db : float
        Loss of the direct way behind the stacks, over free space.
    snr_db : float
        See `SceneConfig`.
    columns, rows : int
        Of the panel.
    """
    return SceneConfig(
        carrier_hz=3.75e9,
        tones=ToneGrid(fft=256, first=64, count=128, spacing_hz=156_250.0),
        panel=PanelConfig(columns, rows, SURFACE, FACING),
        mast=Still(MAST),
        terminals=tuple(Terminal(track) for track in tracks),
        reflectors=(GROUND, EAST_STACK, CRANE_LEG),
        direct=DirectConfig(loss_db=shadow_db),
        snr_db=snr_db,
    )


def _quiet() -> Scenario:
    scene = yard((Still(lane(0.0)[0]),), shadow_db=42.0, snr_db=-8.0)
    return Scenario("quiet", "a carrier waits in the lane, nothing moves", TestbedConfig(scene))


def _slow_carrier() -> Scenario:
    speeds = (0.05, 0.1, 0.2, 0.1)
    norths = (0.0, 1.0, 3.0, 7.0)
    track = Waypoints(lane(*norths), speeds, from_s=10.0, around=True)
    leaves = 10.0
    episodes = []
    for north, after, speed in zip(norths, (*norths[1:], norths[0]), speeds, strict=True):
        arrives = leaves + abs(after - north) / speed
        episodes.append(Episode(leaves, arrives, f"the carrier moves at {speed} m/s"))
        leaves = arrives
    scene = replace(yard((track,), shadow_db=42.0, snr_db=-8.0), episodes=tuple(episodes))
    return Scenario(
        "slow-carrier",
        "a carrier waits, then moves along the lane at 0.05 to 0.2 m/s",
        TestbedConfig(scene),
        time_constant_ms=150.0,
    )


def _blocked() -> Scenario:
    blocks, episodes = [], []
    for start in np.arange(15.0, 600.0, 30.0).tolist():
        blocks.append(Block(from_s=start, until_s=start + 15.0, loss_db=25.0, ramp_s=0.3))
        episodes.append(Episode(start, start + 15.0, "direct path blocked"))
        episodes.append(Episode(start + 15.0, start + 18.0, "direct path free again"))
    scene = yard((Still(lane(0.0)[0]),), shadow_db=26.0, snr_db=6.0)
    scene = replace(scene, direct=replace(scene.direct, blocks=tuple(blocks)), episodes=tuple(episodes))
    text = "a carrier waits; another drives into the direct path at 15 s, out at 30 s, and so on"
    return Scenario("blocked", text, TestbedConfig(scene))


def _moving() -> Scenario:
    track = Waypoints(lane(-8.0, 8.0), (1.0, 3.0), from_s=5.0, around=True)
    legs = [(1.0, 16.0), (3.0, 16.0 / 3.0)]
    episodes, at = [], 5.0
    while at < 600.0:
        for speed, takes in legs:
            episodes.append(Episode(at, at + takes, f"the carrier drives at {speed:.0f} m/s"))
            at += takes
    scene = replace(yard((track,), shadow_db=42.0, snr_db=-8.0), episodes=tuple(episodes))
    return Scenario(
        "moving",
        "a carrier drives up and down the lane at 1 to 3 m/s",
        TestbedConfig(scene),
        bursts_per_s=150.0,
        time_constant_ms=60.0,
        follow_phase=True,
    )


def _payload() -> Scenario:
    moving = _moving()
    return replace(
        moving,
        name="payload",
        text="as moving, but frames carry payload and only those that the tracker plans are sounded",
        testbed=replace(moving.testbed, obeys=True),
        time_constant_ms=800.0,
    )


def _two_carriers() -> Scenario:
    idling = Sway(Still(lane(-4.0)[0]), amplitude=(0.001, 0.001, 0.002), period_s=(3.1, 2.3, 1.7))
    driving = Waypoints(lane(2.0, 5.0), 0.1, from_s=10.0, around=True)
    scene = yard((idling, driving), shadow_db=42.0, snr_db=-8.0)
    scene = replace(scene, episodes=(Episode(10.0, NEVER, "the second carrier moves at 0.1 m/s"),))
    return Scenario(
        "two-carriers",
        "one carrier idles, shaking by a millimetre or two, a second one sets off at 10 s",
        TestbedConfig(scene, frames=32),
        time_constant_ms=200.0,
    )


SCENARIOS: dict[str, Callable[[], Scenario]] = {
    "quiet": _quiet,
    "slow-carrier": _slow_carrier,
    "blocked": _blocked,
    "moving": _moving,
    "payload": _payload,
    "two-carriers": _two_carriers,
}


def scenario(name: str) -> Scenario:
    """Build the scenario of this name.

    Raises
    ------
    KeyError
        When there is none.
    """
    return SCENARIOS[name]()
