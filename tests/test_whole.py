"""Files appear whole or not at all (common practice, no source)."""

from __future__ import annotations

import errno
from pathlib import Path

import pytest

from stillground.errors import OutputError
from stillground.whole import require_writable, whole


def test_nothing_stands_at_the_place_before_the_block_ends(tmp_path: Path) -> None:
    path = tmp_path / "new" / "answer.txt"
    with whole(path) as temporary:
        temporary.write_text("half")
        assert not path.exists()
        assert temporary.parent == path.parent
        assert temporary.suffix == path.suffix
    assert path.read_text() == "half"
    assert list(path.parent.iterdir()) == [path]


@pytest.mark.parametrize("fault", [ValueError, KeyboardInterrupt])
def test_a_failing_block_leaves_the_old_file_and_nothing_else(
    tmp_path: Path, fault: type[BaseException]
) -> None:
    path = tmp_path / "answer.txt"
    path.write_text("old")

    def break_off(temporary: Path) -> None:
        temporary.write_text("half")
        raise fault

    with pytest.raises(fault), whole(path) as temporary:
        break_off(temporary)
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


def test_a_place_that_cannot_be_written_is_named(tmp_path: Path) -> None:
    file = tmp_path / "results"
    file.write_text("a file where a folder should be")
    with (
        pytest.raises(OutputError, match=r"results/answer\.txt cannot be written"),
        whole(file / "answer.txt"),
    ):
        pytest.fail("the block must not start")


def test_a_folder_in_the_way_is_named_and_nothing_is_left(tmp_path: Path) -> None:
    (tmp_path / "answer.txt").mkdir()
    with pytest.raises(OutputError, match=r"answer\.txt cannot be written"), whole(tmp_path / "answer.txt"):
        pass
    assert [path.name for path in tmp_path.iterdir()] == ["answer.txt"]


def test_a_full_disk_is_the_machines_fault_and_passes_as_it_is(tmp_path: Path) -> None:
    full = OSError(errno.ENOSPC, "no space left")
    with pytest.raises(OSError, match="no space left") as caught, whole(tmp_path / "answer.txt"):
        raise full
    assert caught.value is full
    assert not list(tmp_path.iterdir())


def test_a_folder_proves_writable_before_long_work_and_keeps_no_trace(tmp_path: Path) -> None:
    require_writable(tmp_path / "new" / "folder")
    assert list((tmp_path / "new" / "folder").iterdir()) == []
    (tmp_path / "file").touch()
    with pytest.raises(OutputError, match="file cannot be written"):
        require_writable(tmp_path / "file")
