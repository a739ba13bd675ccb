"""The manifest of a snapshot, as it is stored.

Belongs here: the classes that are its format, and the name its content gives a snapshot. Does not belong here:
which snapshots there are (`standing.py`), how one comes to be (`store.py`).
"""

import hashlib
import json
from typing import Annotated, Any, Final, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

MANIFEST = "manifest.json"
PUBLISHED: Final = "published"
HELD_BACK: Final = "held back"
_PATH = r"[a-z_]{1,40}(/[A-Za-z0-9_][A-Za-z0-9_.-]{0,100}){1,6}"


class _Stored(BaseModel):
    """What the parts of a manifest have in common: nothing unknown, nothing changed later."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class StoredFile(_Stored):
    """One file of a snapshot: path below it, SHA-256, rows (0 where it is no table), size in bytes."""

    path: Annotated[str, Field(pattern=f"^{_PATH}$")]
    sha256: Annotated[str, Field(pattern="^[0-9a-f]{64}$")]
    rows: Annotated[int, Field(ge=0)]
    bytes: Annotated[int, Field(ge=0)]


class Verdict(_Stored):
    """What became of one market: its state and why, the digest of its inputs, facts for the gates."""

    state: Literal["published", "held back"]
    reason: str = ""
    inputs: str
    last_good_snapshot: str | None = None
    facts: dict[str, Any] = Field(default_factory=dict)


class Manifest(_Stored):
    """`manifest.json`; the class is the format. The name holds the hash of all the rest of it.

    `publish` sets sequence, name and parent; desk and code are digests, intake the number of the newest one,
    desk_files the SHA-256 under which the archive keeps each file of the desk, arrivals that of the register of
    arrivals up to that intake.
    """

    format: Literal[1] = 1
    sequence: Annotated[int, Field(ge=0)] = 0
    name: str = ""
    parent: str | None = None
    files: dict[str, StoredFile]
    desk: str
    desk_files: dict[str, str] = Field(default_factory=dict)
    arrivals: str = ""
    code: str
    packages: dict[str, str]
    intake: int
    markets: dict[str, Verdict]
    summary: dict[str, Any] = Field(default_factory=dict)

    @model_validator(mode="after")
    def _keyed_by_path(self) -> "Manifest":
        for path, file in self.files.items():
            if path != file.path or ".." in path:
                raise ValueError(f"seen the file {file.path!r} under {path!r}; expected its own path")
        return self

    def proper_name(self) -> str:
        """The name this manifest's content gives it: sequence and hash."""
        content = self.model_dump(mode="json", exclude={"name", *self._absent()})
        text = json.dumps(content, sort_keys=True, separators=(",", ":"), allow_nan=False)
        return f"{self.sequence:06d}-{hashlib.sha256(text.encode()).hexdigest()[:12]}"

    def _absent(self) -> set[str]:
        # A snapshot from before desk and register were recorded keeps the name it got.
        return {name for name in ("desk_files", "arrivals") if not getattr(self, name)}

    def as_bytes(self) -> bytes:
        """The manifest as it is stored."""
        content = self.model_dump(mode="json", exclude=self._absent())
        return (json.dumps(content, sort_keys=True, indent=1, allow_nan=False) + "\n").encode()
