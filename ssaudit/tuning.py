"""Settings of the process that only a program of its own may make, never a library."""

import os
import sys

# Numbers of glibc's mallopt, from its malloc.h.
TRIM_THRESHOLD, TOP_PAD, MMAP_THRESHOLD = -1, -2, -3
MEGABYTE = 1 << 20


def tune_process() -> None:
    """Set the process up for many chunks on worker threads; call it before numpy is imported.

    Workers share the cores among them, so that more threads inside each would only contend. And
    temporary arrays of about a megabyte would be handed back to the system and fetched again, page
    by page, at every chunk: keeping them saved a tenth of the time of an audit at depth modes.
    """
    for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(name, "1")
    if not sys.platform.startswith("linux"):
        return
    import ctypes

    mallopt = getattr(ctypes.CDLL(None), "mallopt", None)
    if mallopt is not None:  # other C libraries go without
        for option, size in ((TRIM_THRESHOLD, 512), (TOP_PAD, 16), (MMAP_THRESHOLD, 32)):
            mallopt(option, size * MEGABYTE)
