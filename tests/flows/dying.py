"""A build that ends its worker process, as a lack of memory would; imported by worker processes."""

import os
import signal
from pathlib import Path
from typing import Any

import catalog.night

real = catalog.night.build_one


def build_one(night: Any, market: str) -> dict[str, Any]:
    """Build TINA; die of TINB."""
    if market == "TINB":
        os._exit(9)
    return real(night, market)


def build_one_killed_once(night: Any, market: str) -> dict[str, Any]:
    """Build TINA; the first to build TINB is killed after it has written, before it could tell."""
    result = real(night, market)
    marker = Path(os.environ["ROPEWALK_TEST_KILL_ONCE"])
    if market == "TINB" and not marker.exists():
        marker.touch()
        os.kill(os.getpid(), signal.SIGKILL)
    return result
