"""What holds for all tests."""

import os

# before numpy is imported: as the program itself does; two threads a matrix product wait for each other on a busy machine
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
