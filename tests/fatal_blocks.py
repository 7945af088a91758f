"""A block of frames that kills its worker, importable by worker processes."""

import os
import signal

from trajcage.run import blocks


def measure_block(job, indices):
    if 6 in indices:
        os.kill(os.getpid(), signal.SIGKILL)
    return blocks.measure_block(job, indices)
