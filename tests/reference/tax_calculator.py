"""Run the open model Tax-Calculator (`taxcalc`) on households from stdin, with numba off.

Without its compiler a thousand households take two seconds; compiling takes twenty.
Usage: NUMBA_DISABLE_JIT=1 python tax_calculator.py YEAR < households.csv > taxes.csv
"""

import sys
import warnings

warnings.simplefilter("ignore")  # of that package's own dependencies

import pandas as pd  # noqa: E402
import taxcalc  # noqa: E402

year = int(sys.argv[1])
records = taxcalc.Records(data=pd.read_csv(sys.stdin), start_year=year, gfactors=None, weights=None)
calculator = taxcalc.Calculator(policy=taxcalc.Policy(), records=records)
calculator.advance_to_year(year)
calculator.calc_all()
result = {"tax": calculator.array("iitax"), "alternative_minimum": calculator.array("c09600")}
pd.DataFrame(result).to_csv(sys.stdout, index=False)
