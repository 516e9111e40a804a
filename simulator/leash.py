"""Runs another module on a leash: when the parent lets go of its standard input, it is asked to end.

``python -P -m simulator.leash agent dashboard SITE ...`` runs ``agent`` as if by ``python -m agent``. The
parent holds the other end of standard input; it closes it to end the child, and the system closes it if the
parent dies by any cause. So a demo leaves nothing running, whatever happens to it, on any system.
"""

import _thread
import os
import runpy
import signal
import sys
import threading
import time
from collections.abc import Sequence

GRACE_S = 3.0


def _watch() -> None:
    while os.read(0, 64):
        pass
    if os.name == "posix":
        os.kill(os.getpid(), signal.SIGTERM)
    else:
        _thread.interrupt_main()  # Windows would kill without a last word
    time.sleep(GRACE_S)
    os._exit(1)


def main(argv: Sequence[str]) -> None:
    module, *words = argv
    threading.Thread(target=_watch, name="leash", daemon=True).start()
    sys.argv = [module, *words]
    runpy.run_module(module, run_name="__main__", alter_sys=True)


if __name__ == "__main__":
    main(sys.argv[1:])
