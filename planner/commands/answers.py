"""What a command answers: figures for other programs, and blocks for a terminal."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeAlias

from rich.console import RenderableType

from planner.reports.export import Json

Block: TypeAlias = Callable[[int, bool], RenderableType]
"""(width of the terminal, plain signs only) -> what to print."""


@dataclass(frozen=True, slots=True, eq=False)
class Answer:
    """Plain data, and blocks to print one after another."""

    data: Json
    blocks: tuple[Block, ...]
