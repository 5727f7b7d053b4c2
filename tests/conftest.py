"""One thread for linear algebra (set before NumPy is imported); Ctrl-C as in a shell."""

import os
import signal

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

if signal.getsignal(signal.SIGINT) is signal.SIG_IGN:
    # Started in the background: the programs that tests start and interrupt would ignore Ctrl-C as well.
    signal.signal(signal.SIGINT, signal.default_int_handler)
