"""Learn: an aperture basis from recorded pilots, for panels with more elements than a burst has frames.

1. The engine follows the logs, in the basis that the settings name, and turns their frames back (`turned`); its own
   estimates give columns to start from.
2. All frames but those held out say together which columns explain them best (`subspace`).
3. The engine predicts the held-out frames with more and fewer of the columns: that says how many to keep (`choice`).
"""

import os
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import suppress
from pathlib import Path

import numpy as np
from threadpoolctl import threadpool_limits

from tracker import __version__
from tracker.assembly import BASIS, configure, shape
from tracker.basis_file import LearnedBasis, pack_basis
from tracker.engine.config import Config
from tracker.logs import LogReader
from tracker.settings import Aperture, Settings, SettingsError, load, parse

from .choice import Blocks, Trials, share_held, try_sizes
from .drawing import draw
from .errors import OfflineError
from .progress import Bars, progress_bar
from .recorded import Piece, Plan, Recorded, take_stock
from .subspace import STEPS, TURNS, Subspace, begin, refine, track
from .turned import Turning, turn

# Columns sought when nobody says how many to keep, and the numbers of them that are tried.
WIDTH = 32
SIZES = (1, 2, 4, 8, 16, 32)
# Estimates kept to start from.
ESTIMATES = 64
# Time constants tried for the coefficients, against that of the settings.
CONSTANTS = (0.25, 1.0, 4.0)
# Sweeps over all unknowns, and stretches, that a log has to hold.
LEAST_SWEEPS = 2.0
LEAST_STRETCHES = 20
# Work that a person will wait for, flop, about a minute or two; and memory, bytes.
MOST_FLOPS = 1.5e12
MOST_BYTES = 512 * 1024 * 1024


def learn(paths: Sequence[Path], settings_path: Path | None, out: Path, size: int | None, progress: bool) -> int:
    """Learn a basis from logs, write it, draw it beside, and say how good it is.

    Parameters
    ----------
    paths : sequence of Path
        Logs.
    settings_path : Path or None
        Settings to use instead of those in the first log.
    out : Path
        File to write, `.npz`; what stood there is replaced when all is done.
    size : int or None
        Columns to keep; None to let the settings, or held-out frames, decide.
    progress : bool
        Whether to show progress.

    Returns
    -------
    int
        Exit status.

    Raises
    ------
    SettingsError, LogError, OfflineError
        One line for the user.
    """
    if out.suffix != ".npz":
        raise OfflineError(f"{out}: the name of a basis must end in .npz")
    settings, text, attached = _settings(paths[0], settings_path)
    if size is None and "size" in settings.aperture.model_fields_set:
        size = settings.aperture.size
    if size is not None and size >= settings.panel.elements:
        raise OfflineError(
            f"{size} columns for {settings.panel.elements} elements: a basis must have fewer columns than elements"
        )
    with threadpool_limits(limits=1), progress_bar(progress, len(paths)) as bars:
        folder = (settings_path or paths[0]).parent
        logs = take_all(paths, settings, bars)
        basis = work_out(logs, settings, text, size, bars, folder, attached)
    _write(out, pack_basis(basis))
    picture = out.with_suffix(".svg")
    _write(picture, draw(basis).encode())
    sys.stdout.write(render(basis, out, picture))
    sys.stdout.writelines(f"damage: {log.path}: {log.damage}\n" for log in logs if log.damage)
    return 0


def take_all(paths: Sequence[Path], settings: Settings, bars: Bars) -> list[Recorded]:
    """Take stock of each log; see `take_stock`."""
    link, sizes = settings.link.name, shape(settings)
    return [take_stock(path, link, sizes, bars.begin(f"{path.name}, contents")) for path in paths]


def work_out(
    logs: Sequence[Recorded],
    settings: Settings,
    text: str,
    size: int | None,
    bars: Bars,
    folder: Path = Path(),
    attached: bytes | None = None,
) -> LearnedBasis:
    """Learn a basis; see `learn`.

    Parameters
    ----------
    logs : sequence of Recorded
    settings : Settings
        The logs are followed in the aperture basis that they name, or element by element where its file is not there.
    text : str
        The same as text, to be kept.
    size : int or None
    bars : Bars
    folder : Path
        Where relative paths of the settings start.
    attached : bytes or None
        Learned basis that lies in the first log, to be used in place of a file.
    """
    config, followed = _config(settings, folder, attached)
    link, sizes = settings.link.name, shape(settings)
    width = size if size is not None else min(WIDTH, settings.panel.elements // 2)
    plan = Plan(logs, _most_frames(config, width, logs))

    def pieces(doing: str) -> Iterator[Piece]:
        return plan.pieces(link, sizes, lambda name: bars.begin(f"{name}, {doing}"))

    stretches = plan.bursts * logs[0].stretches
    turning = turn(pieces("following"), config, max(1, stretches // ESTIMATES))
    _enough(turning, config, logs)
    blocks = Blocks.of(turning.frames / max(stretches, 1), width)
    space = _columns(turning, blocks, config, width, bars)
    held_out = {stretch.number for stretch in turning.stretches if blocks.held_out(stretch.number) is not None}
    tried = [size] if size is not None else [number for number in SIZES if number <= width]
    trials = try_sizes(pieces("trying columns"), config, space, tried, held_out)
    return _basis(turning, space, trials, blocks, logs, settings, text, followed)


def render(basis: LearnedBasis, out: Path, picture: Path) -> str:
    """Say what was learned, for a person."""
    elements, kept = basis.columns.shape
    seconds = (basis.span_ns[1] - basis.span_ns[0]) / 1e9
    columns = "1 column" if kept == 1 else f"{kept} columns"
    lines = [
        f"{columns} for {elements} elements, learned from {basis.frames:,} frames within {seconds:,.2f} s",
        "",
        f"{'columns':>10}  error of predicting held-out frames (1 is noise alone)",
        *(f"{size:>10}  {error:.4f}" for size, error in zip(basis.sizes, basis.errors, strict=True)),
        f"{basis.followed:>10}  {basis.followed_error:.4f}",
        "",
    ]
    if np.isfinite(basis.held):
        lines.append(
            f"The columns kept hold {100 * basis.held:.1f} % of the energy that the surface sends in held-out frames, "
            f"give or take {100 * basis.held_deviation:.1f}."
        )
    else:
        lines.append("How much of the surface's energy the columns hold cannot be told: too little of it is heard.")
    if min(basis.errors) >= basis.followed_error:
        lines.append(f'They predict no better than the basis "{basis.followed}": keep to that, or record a longer log.')
    lines.append(f"{out} is written, {picture} shows it.")
    return "\n".join(lines) + "\n"


def _settings(log: Path, path: Path | None) -> tuple[Settings, str, bytes | None]:
    if path is not None:
        return load(path), path.read_text(encoding="utf-8"), None
    attachments = LogReader(log).attachments
    data = attachments.get("settings.toml")
    if data is None:
        raise OfflineError(f"{log}: holds no settings; give them with --settings")
    text = data.decode(errors="replace")
    return parse(text, f"{log}: settings.toml"), text, attachments.get(BASIS)


def _config(settings: Settings, folder: Path, attached: bytes | None) -> tuple[Config, str]:
    """Build what the logs are followed with, and name its basis."""
    try:
        return configure(settings, folder, attached), settings.aperture.basis
    except SettingsError:
        if settings.aperture.basis != "learned":
            raise
        # The file that is to be learned, as a rule.
        return configure(settings.model_copy(update={"aperture": Aperture()}), folder), Aperture().basis


def _most_frames(config: Config, width: int, logs: Sequence[Recorded]) -> int:
    """Frames that can be worked off in bearable time and memory."""
    elements = config.elements
    flops = 3.0 * (config.aperture.size + 1) ** 2 * config.bank + 16.0 * elements * width * TURNS * (STEPS + 2)
    outputs = config.receivers * config.delay.shape[1]
    # Frames on the delay basis, and a few covariances of the coefficients a stretch.
    stretch = max(logs[0].frames / logs[0].stretches, 1.0)
    bytes_a_frame = elements / 8 + 8 * outputs + 64.0 * (width + 1) ** 2 / stretch
    return int(min(MOST_FLOPS / flops, MOST_BYTES / bytes_a_frame))


def _enough(turning: Turning, config: Config, logs: Sequence[Recorded]) -> None:
    """Refuse what nothing can be learned from."""
    names = ", ".join(str(log.path) for log in logs)
    followed = sum(stretch.outputs.shape[0] for stretch in turning.stretches)
    least = int(LEAST_SWEEPS * (config.elements + 1))
    with_warming = least + config.aperture.size + 1
    if turning.frames < with_warming:
        raise OfflineError(
            f"{names}: too short: {turning.frames} frames, at least {with_warming} are needed for "
            f"{config.elements} elements; record more"
        )
    if followed < least or len(turning.stretches) < LEAST_STRETCHES or not turning.estimates.shape[1]:
        raise OfflineError(
            f"{names}: the phases could be followed in {followed} of {turning.frames} frames only, at least {least} in "
            f"{LEAST_STRETCHES} bursts are needed; record more, sound the reference more often, or name a basis in the "
            'settings that follows better, such as "region"'
        )


def _columns(turning: Turning, blocks: Blocks, config: Config, width: int, bars: Bars) -> Subspace:
    stretches = turning.stretches
    used = [blocks.held_out(stretch.number) is None for stretch in stretches]
    space = begin(turning.estimates, width, 0.1 * turning.direct_power + 1e-3)
    constants = [share * config.time_constant_s for share in CONSTANTS]
    few = space.cut(16)
    errors = [track(stretches, used, few, constant, backward=False).error for constant in constants]
    advanced = _fine(bars.begin("columns"))
    return refine(stretches, used, space, constants[int(np.argmin(errors))], advanced)


def _basis(
    turning: Turning,
    space: Subspace,
    trials: Trials,
    blocks: Blocks,
    logs: Sequence[Recorded],
    settings: Settings,
    text: str,
    followed: str,
) -> LearnedBasis:
    kept = space.cut(trials.size)
    held = share_held(turning.stretches, kept, blocks)
    out = [stretch.error for stretch in turning.stretches if blocks.held_out(stretch.number) is not None]
    return LearnedBasis(
        columns=np.ascontiguousarray(kept.columns),
        variances=kept.variances,
        eigenvalues=space.eigenvalues,
        noise=space.noise,
        panel=(settings.panel.columns, settings.panel.rows),
        logs=tuple(log.path.name for log in logs),
        sha256=tuple(log.sha256 for log in logs),
        span_ns=turning.span_ns,
        frames=sum(
            stretch.outputs.shape[0] for stretch in turning.stretches if blocks.held_out(stretch.number) is None
        ),
        settings=text,
        version=__version__,
        held=held.share if held else float("nan"),
        held_deviation=held.deviation if held else float("nan"),
        sizes=trials.sizes,
        errors=trials.errors,
        followed=followed,
        followed_error=float(np.mean(out)),
    )


def _fine(advanced: Callable[[int, int], None]) -> Callable[[int, int], None]:
    """Tell a bar made for bytes of a few steps."""
    return lambda done, size: advanced(done << 20, size << 20)


def _write(path: Path, data: bytes) -> None:
    """Write a file, whole or not at all."""
    part = path.with_name(path.name + ".part")
    try:
        part.write_bytes(data)
        os.replace(part, path)
    except OSError as error:
        with suppress(OSError):
            part.unlink()
        raise OfflineError(f"{path}: cannot be written: {error.strerror}") from None
