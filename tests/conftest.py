"""What holds for all tests."""

import os
import signal

# before numpy is imported: as the program itself does; two threads a matrix product wait for each other on a busy machine
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

# whoever started the tests in the background may have had these ignored, and what tests start would inherit that
signal.signal(signal.SIGINT, signal.default_int_handler)
if hasattr(signal, "SIGHUP"):
    signal.signal(signal.SIGHUP, signal.SIG_DFL)
