"""Writes the map of files in DEVELOPERS.md anew, from the first words of each file.

python tools/make_map.py
"""

import ast
from collections.abc import Iterator
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent
PAGE = ROOT / "DEVELOPERS.md"
BEGIN, END = "## Map of files\n", "\nTests mirror the tree"


def with_map(page: str) -> str:
    """Replace the map in the text of the page."""
    before, _, rest = page.partition(BEGIN)
    _, _, after = rest.partition(END)
    return before + BEGIN + "\n" + "\n".join(_map()) + END + after


def _map() -> Iterator[str]:
    for package in sorted(ROOT.glob("tracker/**/__init__.py"), key=lambda path: path.parent):
        folder = package.parent
        title = f"`{folder.relative_to(ROOT).as_posix()}/`: {_head(package)}"
        yield from _table(title, sorted(folder.glob("*.py")))
    tools = ROOT / "tools"
    scripts = sorted(path for path in tools.iterdir() if path.is_file())
    modules = [path for folder in ("benchmarks", "pictures") for path in sorted((tools / folder).glob("*.py"))]
    yield from _table("`tools/`", [*scripts, *modules])


def _table(title: str, files: list[Path]) -> Iterator[str]:
    yield from (f"### {title}", "", "| file | what |", "|---|---|")
    for path in files:
        if path.name != "__init__.py":
            yield f"| [`{path.name}`]({path.relative_to(ROOT).as_posix()}) | {_head(path)} |"
    yield ""


def _head(path: Path) -> str:
    """Give the first words of a file: of a module's docstring, or of a script's comment."""
    text = path.read_text(encoding="utf-8")
    if text.startswith("#!"):
        return text.splitlines()[1].removeprefix("# ").split(";")[0].rstrip(".").replace("|", "\\|")
    paragraph = (ast.get_docstring(ast.parse(text)) or "").partition("\n\n")[0]
    return " ".join(paragraph.split()).rstrip(".").replace("|", "\\|")


if __name__ == "__main__":
    PAGE.write_text(with_map(PAGE.read_text(encoding="utf-8")), encoding="utf-8")
