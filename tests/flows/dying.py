"""A build that ends its worker process, as a lack of memory would; imported by worker processes."""

import os
from typing import Any

import catalog.night

real = catalog.night.build_one


def build_one(night: Any, market: str) -> dict[str, Any]:
    """Build TINA; die of TINB."""
    if market == "TINB":
        os._exit(9)
    return real(night, market)
