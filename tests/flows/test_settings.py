"""Which desk, raw folder and store a command works on."""

from pathlib import Path

import pytest

from contracts.errors import DeskError
from flows.settings import find_where, sample_desk


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    folder = tmp_path / "desk"
    folder.mkdir()
    (folder / "desk.toml").write_text('raw = "../incoming"\nstore = "../out"\n')
    return folder


def test_without_options_it_is_the_sample_desk_and_published_here(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    where = find_where(None, None, None)
    assert where.desk == sample_desk()
    assert (where.desk / "desk.toml").is_file()
    assert where.raw is None
    assert where.store == tmp_path / "published"


def test_a_desk_names_its_own_store(desk: Path, tmp_path: Path) -> None:
    where = find_where(str(desk), None, None)
    assert (where.desk, where.raw, where.store) == (desk, None, tmp_path / "out")


def test_raw_and_store_given_win_over_the_desk(desk: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    where = find_where("desk", "a", "b")
    assert (where.desk, where.raw, where.store) == (desk, tmp_path / "a", tmp_path / "b")


def test_a_mistake_elsewhere_in_the_desk_does_not_hide_the_store(desk: Path, tmp_path: Path) -> None:
    (desk / "markets").mkdir()
    (desk / "markets" / "a.toml").write_text("this is no TOML")
    assert find_where(str(desk), None, None).store == tmp_path / "out"


@pytest.mark.parametrize(
    ("text", "key", "seen"),
    [
        ('raw = "x"\n', "store", "nothing"),
        ("store = 3\n", "store", "3"),
        ('store = ""\n', "store", "''"),
        ("store = \n", "(file)", "Invalid value"),
        (None, "(file)", "no such file"),
    ],
)
def test_a_desk_without_a_readable_store_is_refused(desk: Path, text: str | None, key: str, seen: str) -> None:
    if text is None:
        (desk / "desk.toml").unlink()
    else:
        (desk / "desk.toml").write_text(text)
    with pytest.raises(DeskError) as caught:
        find_where(str(desk), None, None)
    (mistake,) = caught.value.mistakes
    assert (mistake.key, mistake.seen) == (key, seen)
    assert mistake.file.endswith("desk.toml")
