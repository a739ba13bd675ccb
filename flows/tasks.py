"""One market as one Prefect task.

Belongs here: what Prefect is told of a market. Does not belong here: how it is built (`catalog/night.py`).
"""

from typing import TYPE_CHECKING, Any

from prefect import task
from prefect.cache_policies import NO_CACHE
from prefect.states import Completed

if TYPE_CHECKING:
    from catalog.night import Night

HELD_BACK = "Not built"


# A market that fails once fails again: its files are the same. A retry would only hide which night it was.
@task(
    name="build a market",
    task_run_name="{market}",
    cache_policy=NO_CACHE,
    retries=0,
    persist_result=False,
    log_prints=False,
)
def build_market(night: "Night", market: str) -> Any:
    """Build one market into the night's staging folder.

    Returns the result of `catalog.night.build_one`; where that tells of an error, the task's state is named
    `Not built` and says why, so that it is seen in the list of runs.
    """
    from catalog.night import build_one

    result = build_one(night, market)
    if result["error"]:
        return Completed(name=HELD_BACK, message=str(result["error"]), data=result)
    return result
