"""Makes the pictures of the README: the live screen at work, and the loop that the tracker closes.

    python tools/pictures/make.py loop     draws the loop
    python tools/pictures/make.py live     runs the demo for a minute and takes a picture of its screen

Each picture is made twice, for light and for dark pages. Run it with the Python that tools/environment names.
"""

import argparse
import sys
import tempfile
import time
from pathlib import Path

FOLDER = Path(__file__).resolve().parent
sys.path.insert(0, str(FOLDER.parent))  # so that the demo is found, and these modules as `pictures.NAME`

import demo  # noqa: E402

from pictures import loop, screen  # noqa: E402
from pictures.theme import THEMES  # noqa: E402
from tracker.view import terminal  # noqa: E402
from tracker.view.model import LinkModel  # noqa: E402
from tracker.view.sections import Scene  # noqa: E402
from tracker.view.stream import Stream  # noqa: E402

COLUMNS, ROWS = 120, 34
LIVE = "The live screen: rates, innovation and drift over the last minute, the pattern in use, figures and events"


def live(model: LinkModel, source: str, shape: tuple[int, int], since: float, now: float, folder: Path) -> None:
    """Draw the live screen of a model into a folder."""
    scene = Scene(model, source, shape, since, now)
    for theme in THEMES:
        text = screen.svg(terminal.screen(scene, COLUMNS, ROWS), COLUMNS, ROWS, theme, LIVE)
        (folder / f"live-{theme.name}.svg").write_text(text, encoding="utf-8")


def watch_demo(scene: str, seed: int, seconds: float) -> None:
    """Run service and stand-in testbed as the demo does, and draw what its screen shows in the end."""
    with (
        tempfile.TemporaryDirectory() as folder,
        demo.running(scene, seed, seconds, Path(folder)) as (settings, parts),
        Stream(settings.sockets.publish, settings.sockets.pilots, link=demo.LINK) as stream,
    ):
        since = time.monotonic()
        while time.monotonic() - since < seconds and all(part.running for part in parts):
            stream.receive(1.0)
        for part in parts:
            if not part.running:
                raise SystemExit(f"tools/pictures/make.py: {part.complaint()}")
        shape = (settings.panel.columns, settings.panel.rows)
        # The ports are drawn by chance; the picture shows those that stand in the settings by default.
        live(stream.model, "tcp://127.0.0.1:5601", shape, since, time.monotonic(), FOLDER)


def main() -> int:
    """Make what was asked for."""
    parser = argparse.ArgumentParser(prog="tools/pictures/make.py", description="Makes the pictures of the README.")
    parser.add_argument("picture", choices=("loop", "live"), help="which")
    parser.add_argument("--scene", metavar="NAME", default="blocked", help="of the demo (default: blocked)")
    parser.add_argument("--seed", metavar="INT", type=int, default=1, help="of all chance in the scene (default: 1)")
    parser.add_argument("--seconds", metavar="S", type=float, default=66.0, help="how long (default: 66)")
    asked = parser.parse_args()
    if asked.picture == "live":
        watch_demo(asked.scene, asked.seed, asked.seconds)
    else:
        for theme in THEMES:
            (FOLDER / f"loop-{theme.name}.svg").write_text(loop.svg(theme), encoding="utf-8")
    return 0


if __name__ == "__main__":
    sys.exit(main())
