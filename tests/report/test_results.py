"""A run's folder is there as a whole or not at all, and never in place of something else."""

import json
import os
import stat
from pathlib import Path

import pytest

from emu.errors import UserError
from emu.report.results import check_free, run_folder, write_record


def finished(out: Path, text: str, overwrite: bool = False) -> None:
    with run_folder(out, overwrite) as folder:
        (folder / "draws").write_text(text)
        write_record(folder, {"x": text})


def test_the_folder_appears_only_when_all_is_written(tmp_path: Path) -> None:
    out = tmp_path / "deep" / "run"
    with run_folder(out, overwrite=False) as folder:
        (folder / "draws").write_text("all")
        assert not out.exists()
    assert (out / "draws").read_text() == "all"
    assert [path.name for path in out.parent.iterdir()] == ["run"]


def test_others_may_read_it_as_the_mask_allows(tmp_path: Path) -> None:
    before = os.umask(0o022)
    try:
        finished(tmp_path / "run", "a")
    finally:
        os.umask(before)
    assert stat.S_IMODE((tmp_path / "run").stat().st_mode) == 0o755


@pytest.mark.parametrize("error", [RuntimeError("broken"), KeyboardInterrupt()])
def test_an_error_or_interrupt_leaves_nothing(tmp_path: Path, error: BaseException) -> None:
    def half() -> None:
        with run_folder(tmp_path / "run", overwrite=False) as folder:
            (folder / "draws").write_text("half")
            raise error

    with pytest.raises(type(error)):
        half()
    assert not list(tmp_path.iterdir())


def test_an_error_leaves_the_earlier_run_as_it_was(tmp_path: Path) -> None:
    out = tmp_path / "run"
    finished(out, "first")
    with pytest.raises(RuntimeError), run_folder(out, overwrite=True):
        raise RuntimeError
    assert (out / "draws").read_text() == "first"
    assert [path.name for path in tmp_path.iterdir()] == ["run"]


def test_an_earlier_run_is_replaced_only_when_asked_for(tmp_path: Path) -> None:
    out = tmp_path / "run"
    finished(out, "first")
    with pytest.raises(UserError, match="--overwrite"):
        finished(out, "second")
    assert (out / "draws").read_text() == "first"
    finished(out, "second", overwrite=True)
    assert (out / "draws").read_text() == "second"
    assert [path.name for path in tmp_path.iterdir()] == ["run"]


def test_anything_else_is_never_replaced(tmp_path: Path) -> None:
    other = tmp_path / "other"
    other.mkdir()
    (other / "run.json").write_text(json.dumps({"made_by": "someone"}))
    (tmp_path / "file").write_text("")
    for overwrite in (False, True):
        with pytest.raises(UserError, match="not an earlier run"):
            check_free(other, overwrite)
        with pytest.raises(UserError, match="is a file"):
            check_free(tmp_path / "file", overwrite)
    assert (other / "run.json").exists()


def test_an_empty_folder_is_free(tmp_path: Path) -> None:
    out = tmp_path / "empty"
    out.mkdir()
    finished(out, "a")
    assert (out / "draws").read_text() == "a"


def test_a_place_that_cannot_be_made_is_one_line(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(UserError, match="cannot be made"), run_folder(tmp_path / "file" / "run", False):
        pass
