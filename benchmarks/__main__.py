"""``python -m benchmarks`` prints every ratio."""

import os

# the host may pin these for other programs; they change what is measured
for name in ("OPENBLAS_CORETYPE", "OPENBLAS_L2_SIZE"):
    os.environ.pop(name, None)
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

from benchmarks import coordinated_turn  # noqa: E402 - after the environment is set

coordinated_turn.main()
