"""The service with a wish to die: `victim.py CONFIG STEP COUNT` kills itself with SIGKILL at a step's COUNTth time."""

import os
import signal
import sys
from pathlib import Path

from quietmill.logs import set_up_logs
from quietmill.monitor import Monitor, stopped_by_signals
from quietmill.settings import load


def main(config: str, step: str, count: str) -> None:
    set_up_logs()
    monitor, left = Monitor(load(Path(config))), [int(count)]

    def at(name: str) -> None:
        if name == step:
            left[0] -= 1
            if left[0] == 0:
                os.kill(os.getpid(), signal.SIGKILL)

    monitor.passage.at = at
    with stopped_by_signals(monitor):
        monitor.start()
        while not monitor.stopping:
            monitor.turn(0.05)
        monitor.close()


if __name__ == "__main__":
    main(*sys.argv[1:])
