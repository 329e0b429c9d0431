"""Work that kills its own process once; a module of its own, so that other processes find it by name."""

import os
import signal
import time
from pathlib import Path

from daraf.bem.executor import solve_task

FLAG = "DARAF_TEST_DIE_ONCE"


def die_once(task):
    """Solve; the first process that gets column 2 is killed in the middle of the work."""
    flag = Path(os.environ[FLAG])
    if 2 in task.columns and not flag.exists():
        flag.touch()
        time.sleep(0.5)  # others are under way
        os.kill(os.getpid(), signal.SIGKILL)
    return solve_task(task)
