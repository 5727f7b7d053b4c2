"""Golden files: text compared whole; REWRITE_GOLDEN=1 writes them anew, to be read in the diff."""

import io
import os
from pathlib import Path

from rich.console import Console, RenderableType

GOLDEN = Path(__file__).parent / "golden"


def rendered(content: RenderableType, width: int = 80) -> str:
    """What a terminal of that width shows, without colour; trailing spaces dropped."""
    console = Console(file=io.StringIO(), width=width, color_system=None, legacy_windows=False)
    console.print(content)
    assert isinstance(console.file, io.StringIO)
    return "\n".join(line.rstrip() for line in console.file.getvalue().splitlines()) + "\n"


def assert_golden(name: str, text: str) -> None:
    path = GOLDEN / name
    if os.environ.get("REWRITE_GOLDEN"):
        path.write_text(text, "utf-8")
    assert path.exists(), f"no golden file {name}: write it with REWRITE_GOLDEN=1 and read it"
    assert text == path.read_text("utf-8")
