"""Published tables that are damaged: telling which, and making them again from the archive.

Belongs here: telling damage by its bytes, and the build that gives the same bytes once more. Does not belong here:
what a night does with it (`laying.py`), the report of all that is wrong with a store (`verify.py`).
"""

from collections.abc import Iterable
from pathlib import Path, PurePosixPath

from catalog.archive import Intake, read_register
from catalog.assignment import assign_files, code_digest, gather_inputs, package_versions, table_stamp
from catalog.kept_desk import desk_of
from catalog.manifest import Manifest, StoredFile
from catalog.places import Places, table_path
from catalog.standing import check_each, origin_of
from catalog.store import write_table
from contracts.build import build_market
from contracts.errors import RopewalkError, StoreUnsound
from contracts.tables import MARKET_TABLES


def damaged_owners(places: Places, manifest: Manifest) -> frozenset[str]:
    """Markets (and `_desk`) of whose tables in a snapshot one is gone or holds other bytes than were published.

    Reads every file of the snapshot.
    """
    problems = check_each(places.snapshot(manifest.name), manifest.files.values())
    return frozenset(PurePosixPath(path).stem for path in problems)


def make_again(
    places: Places, manifest: Manifest, market: str, paths: Iterable[str], folder: Path
) -> dict[str, StoredFile]:
    """Build tables of a market again as they were published, and write them below a folder.

    They are built from the archive with the desk and the arrivals of the snapshot in which they were made, and
    have to come out byte for byte. Raises StoreUnsound, saying why, where they do not or cannot be built, and
    then leaves none of them; UsageError where the snapshot in which they were made is gone.
    """
    origin = origin_of(places, manifest, market)
    if origin.code != code_digest():
        raise StoreUnsound(f"other code made them in {origin.name}")
    if origin.packages != package_versions():
        raise StoreUnsound(f"other versions of packages made them in {origin.name}")
    desk = desk_of(places, origin)
    arrivals = tuple(arrival for arrival in read_register(places) if arrival.taken_in <= origin.intake)
    files = assign_files(desk, Intake(origin.intake, 0, arrivals, ()), places).files[market]
    try:
        built = build_market(gather_inputs(desk, market, files, places))
    except (RopewalkError, ValueError) as error:
        raise StoreUnsound(f"the archive no longer gives them: {error}") from error
    made: dict[str, StoredFile] = {}
    for table in MARKET_TABLES:
        path = table_path(table.name, market)
        if path not in paths:
            continue
        made[path] = write_table(folder, table, market, built.tables[table.name], table_stamp(desk, market, files))
        if made[path] != origin.files.get(path):
            for each in made:
                (folder / each).unlink()
            raise StoreUnsound(f"{path} made again holds other bytes than were published in {origin.name}")
    return made
