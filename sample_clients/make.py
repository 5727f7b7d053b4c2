"""Write the sample clients anew from the workbook's layout: python sample_clients/make.py [FOLDER].

Every household here is invented. Market assumptions are round numbers chosen for the samples; they
come from no forecast.
"""

from __future__ import annotations

import sys
from pathlib import Path

from broken import BROKEN_REMARK, FORMULA_CELL, broken
from common import INVENTED
from couples import COUPLE_LEGACY, COUPLE_TAXED_EACH, COUPLE_THREE_ACCOUNTS
from openpyxl.workbook import Workbook
from singles import EARLY_RETIREE, LATE_RETIRED, SINGLE_WITH_PENSION

from planner.workbook.saving import workbook_bytes
from planner.workbook.writing import Values, make_workbook

CLIENTS: dict[str, Values] = {
    "single_with_pension": SINGLE_WITH_PENSION,
    "couple_three_accounts": COUPLE_THREE_ACCOUNTS,
    "late_retired": LATE_RETIRED,
    "early_retiree": EARLY_RETIREE,
    "couple_legacy": COUPLE_LEGACY,
    "couple_taxed_each": COUPLE_TAXED_EACH,
}


def workbooks() -> dict[str, Workbook]:
    """Return every sample workbook by the name of its file, without the ending."""
    made = {name: make_workbook(values, remark=INVENTED) for name, values in CLIENTS.items()}
    made["broken"] = make_workbook(broken(), remark=BROKEN_REMARK)
    sheet, cell, formula = FORMULA_CELL
    made["broken"][sheet][cell] = formula
    return made


def main(folder: Path) -> None:
    """Write every sample workbook into a folder, replacing those that are there."""
    for name, workbook in workbooks().items():
        (folder / f"{name}.xlsx").write_bytes(workbook_bytes(workbook))


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
