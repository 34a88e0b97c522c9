"""What settings amount to, in the units that a person plans with: unknowns, memory, work, queues."""

import math
import time
from dataclasses import dataclass

import numpy as np

from tracker.engine.config import Config
from tracker.engine.estimation.aperture import Columns
from tracker.engine.estimation.delay import frequencies
from tracker.settings import Settings

LIGHT_M_S = 299_792_458.0
FRAMES = 64  # in the burst that sizes are given for
# Larger messages are given back to the operating system and faulted in again, at several times the cost.
LARGEST_BURST = 512 * 1024


@dataclass(frozen=True, slots=True)
class Demand:
    """What an estimator needs.

    Parameters
    ----------
    unknowns : int
        n, regressors of one output: the direct path and the columns of the aperture basis.
    outputs : int
        D, receivers times delay directions; each has `unknowns` complex coefficients.
    covariance_bytes : int
        P, n × n, complex where the columns of the aperture basis are.
    coefficient_bytes : int
        C, n × D complex.
    flops_a_frame : int
        Floating-point operations a frame: P Zᵀ (2 n²), P − XᵀX on one triangle (n²), Z C and XᵀL⁻¹(Y − Z C) with
        complex C (4 n D each). With complex columns the first two cost four times as much, the others twice, and Uᵀs
        comes on top (4 N r).
    burst_bytes : int
        Patterns and response of a burst of `FRAMES` frames.
    """

    unknowns: int
    outputs: int
    covariance_bytes: int
    coefficient_bytes: int
    flops_a_frame: int
    burst_bytes: int


def demand(config: Config) -> Demand:
    """Work out what an estimator needs."""
    unknowns = config.aperture.size + 1
    outputs = config.receivers * config.delay.shape[1]
    flops = 3 * unknowns**2 + 8 * unknowns * outputs
    if config.aperture.is_complex:
        flops = 12 * unknowns**2 + 16 * unknowns * outputs + 4 * config.elements * config.aperture.size
    return Demand(
        unknowns=unknowns,
        outputs=outputs,
        covariance_bytes=(16 if config.aperture.is_complex else 8) * unknowns**2,
        coefficient_bytes=16 * unknowns * outputs,
        flops_a_frame=flops,
        burst_bytes=FRAMES * _frame_bytes(config),
    )


def summary(settings: Settings, config: Config, queue: int) -> str:
    """Say what settings amount to.

    Parameters
    ----------
    settings : Settings
    config : Config
        What the engine makes of them.
    queue : int
        Bursts that may wait to be received.

    Returns
    -------
    str
        Lines for a person.
    """
    need = demand(config)
    tones, delay = settings.tones, settings.delay
    tone_hz = frequencies(tones.fft, tones.first, tones.count, tones.spacing_khz)
    sample_s = 1.0 / (tones.fft * tones.spacing_khz * 1e3)
    after = delay.taps - 1 - delay.before
    tau_s = settings.estimator.time_constant_ms / 1e3
    speed = _core_flops()
    most_frames = LARGEST_BURST // _frame_bytes(config)
    lines = [
        ("link", f"{settings.link.name}, {config.receivers} receiver{'s' if config.receivers > 1 else ''}"),
        ("panel", f"{settings.panel.columns} columns × {settings.panel.rows} rows, N = {config.elements} elements"),
        (
            "pilot tones",
            f"{config.tones} of {tones.fft}, {tones.spacing_khz:g} kHz apart: {tone_hz[0] / 1e6:+.3f} to "
            f"{tone_hz[-1] / 1e6:+.3f} MHz about the carrier",
        ),
        (
            "channel",
            f"{after * sample_s * 1e9:,.0f} ns long ({after * sample_s * LIGHT_M_S:,.0f} m of detour) and "
            f"{delay.before * sample_s * 1e9:,.0f} ns ahead: {config.delay.shape[1]} delay directions, the other "
            f"{config.tones - config.delay.shape[1]} show noise alone",
        ),
        (
            "unknowns",
            f"{need.unknowns} complex for each of {need.outputs} outputs (receivers × delay directions), "
            f'basis "{settings.aperture.basis}"{_held(settings, config)}',
        ),
        (
            "memory",
            f"covariance {_bytes(need.covariance_bytes)}, coefficients {_bytes(need.coefficient_bytes)}",
        ),
        (
            "work",
            f"{need.flops_a_frame / 1e6:,.3g} Mflop a frame; this core multiplies at {speed / 1e9:,.3g} Gflop/s, "
            f"enough for {_round(speed / need.flops_a_frame)} frames/s at the very most",
        ),
        (
            "forgetting",
            f"{settings.estimator.forgetting}, {settings.estimator.time_constant_ms:g} ms: below "
            f"{_round(need.unknowns / tau_s)} frames/s there are fewer frames than unknowns in it",
        ),
        (
            "refresh",
            f"within {settings.refresh.budget_ms:g} ms, every {_ordinal(settings.refresh.every_bursts)} burst, "
            f"when it gains {settings.refresh.least_gain:g} bit/s/Hz",
        ),
        (
            "bursts",
            f"{_bytes(need.burst_bytes)} for {FRAMES} frames; keep them at {max(most_frames, 1):,} frames or fewer "
            f"({_bytes(LARGEST_BURST)}), larger ones cost several times more",
        ),
        (
            "queue",
            f"{queue:,} bursts may wait, {_bytes(queue * need.burst_bytes)} when they hold {FRAMES} frames",
        ),
        (
            "sockets",
            f"pilots from {settings.sockets.pilots}, publishes at {settings.sockets.publish}, "
            f"control at {settings.sockets.control}",
        ),
        ("journal", f"{settings.journal.folder}, a new file every {settings.journal.rotate_mb:g} MB"),
    ]
    return "\n".join(f"{label:<12} {text}" for label, text in lines)


def _held(settings: Settings, config: Config) -> str:
    """Say how much of what is to be expected the columns of an aperture basis hold."""
    held = config.aperture.held if isinstance(config.aperture, Columns) else None
    if held is None:
        return ""
    whose = "waves from the region" if settings.aperture.basis == "region" else "frames held out when it was learned"
    return f", whose {config.aperture.size} columns hold {100 * held:.1f} % of the energy in {whose}"


def _frame_bytes(config: Config) -> int:
    return -(-config.elements // 8) + 8 * config.receivers * config.tones


def _bytes(count: float) -> str:
    for unit in ("B", "KB", "MB"):
        if count < 1024:
            return f"{count:.3g} {unit}"
        count /= 1024
    return f"{count:,.3g} GB"


def _round(value: float) -> str:
    """Two significant digits: more would pretend to a precision that is not there."""
    digits = 1 - math.floor(math.log10(value))
    return f"{round(value, digits):,.{max(digits, 0)}f}"


def _ordinal(number: int) -> str:
    if number == 1:
        return "single"
    suffix = "th" if 10 < number % 100 < 20 else {1: "st", 2: "nd", 3: "rd"}.get(number % 10, "th")
    return f"{number}{suffix}"


def _core_flops(size: int = 512, repeats: int = 4) -> float:
    """Measure how fast this core multiplies matrices, flop/s: the best of a few tries."""
    matrix = np.ones((size, size))
    best = math.inf
    for _ in range(repeats):
        begun = time.perf_counter()
        matrix @ matrix
        best = min(best, time.perf_counter() - begun)
    return 2.0 * size**3 / best
