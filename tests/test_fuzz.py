"""Whatever is done to a client workbook, it is read or refused in words: see `fuzzing.py`."""

import os
import re
import subprocess
import sys
from pathlib import Path

SCRIPT = Path(__file__).with_name("fuzzing.py")


def test_two_thousand_mutations():
    """In a process of its own, which may use 1 GiB and 10 s a workbook. For 20,000 run the script."""
    command = [sys.executable, str(SCRIPT), "--mutations", "2000", "--check-every", "10"]
    # One thread: each reserves its own address space, which counts towards the limit.
    environment = os.environ | {"OPENBLAS_NUM_THREADS": "1"}
    done = subprocess.run(command, capture_output=True, text=True, env=environment, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
    counted = re.search(r"2000 mutations: (\d+) read, (\d+) refused, 0 faults", done.stdout)
    assert counted
    assert min(int(counted[1]), int(counted[2])) > 400  # neither end of the scale is left untested
