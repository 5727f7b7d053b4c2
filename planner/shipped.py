"""Names of the tax rules and life tables that are shipped, read from the data folder.

Kept apart from the modules that load them so that the workbook and the household can list names
without importing any numerical library.
"""

from __future__ import annotations

from importlib.resources import files


def _stems(folder: str, suffix: str) -> tuple[str, ...]:
    place = files("planner").joinpath("data", folder)
    if not place.is_dir():
        return ()
    names = (entry.name for entry in place.iterdir() if entry.name.endswith(suffix))
    return tuple(sorted(name.removesuffix(suffix) for name in names))


def tax_rule_names() -> tuple[str, ...]:
    """Shipped sets of tax rules by name (without ``own``, which is the workbook's sheet)."""
    return tuple(name for name in _stems("taxes", ".toml") if name != "own")


def life_table_names() -> tuple[str, ...]:
    """Shipped life tables by name (without ``own``, which is the workbook's sheet)."""
    return tuple(name for name in _stems("life_tables", ".csv") if name != "own")
