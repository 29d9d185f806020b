"""A file is written whole or not at all, and never over another one unasked."""

import pytest

from orbits import InputError
from orbits.files import refuse_existing, whole_file


def test_file_appears_only_when_the_block_ends_well(tmp_path):
    path = tmp_path / "new" / "result.txt"
    with whole_file(path) as temporary:
        temporary.write_text("done")
        assert not path.exists()
    assert path.read_text() == "done"
    assert list(path.parent.iterdir()) == [path]


@pytest.mark.parametrize("failure", [ValueError, KeyboardInterrupt])
def test_failure_leaves_nothing(tmp_path, failure):
    path = tmp_path / "result.txt"
    with pytest.raises(failure), whole_file(path) as temporary:
        temporary.write_text("half")
        raise failure
    assert list(tmp_path.iterdir()) == []


def test_existing_file_is_kept_unless_forced(tmp_path):
    path = tmp_path / "result.txt"
    path.write_text("old")
    with pytest.raises(InputError, match="exists already"), whole_file(path) as temporary:
        temporary.write_text("new")
    assert path.read_text() == "old"
    with whole_file(path, force=True) as temporary:
        temporary.write_text("new")
    assert path.read_text() == "new"


def test_file_that_appears_meanwhile_is_kept(tmp_path):
    path = tmp_path / "result.txt"
    with pytest.raises(InputError, match="exists already"), whole_file(path) as temporary:
        temporary.write_text("ours")
        path.write_text("theirs")
    assert path.read_text() == "theirs"


def test_permissions_are_those_of_an_ordinary_new_file(tmp_path):
    plain = tmp_path / "plain"
    plain.touch()
    with whole_file(tmp_path / "result.txt"):
        pass
    assert (tmp_path / "result.txt").stat().st_mode == plain.stat().st_mode


def test_a_file_in_the_place_of_a_folder_is_named(tmp_path):
    (tmp_path / "results").write_text("no folder")
    for path in (tmp_path / "results" / "table.csv", tmp_path / "results" / "deep" / "table.csv"):
        with pytest.raises(InputError, match=r"results is a file; choose another folder"):
            refuse_existing(path, force=True)
        with pytest.raises(InputError, match="is a file"), whole_file(path):
            pass


def test_a_folder_that_is_closed_is_named_before_any_work(tmp_path, monkeypatch):
    """Whoever runs the tests may write anywhere, so the answer of the system is set."""
    monkeypatch.setattr("os.access", lambda path, mode: False)
    with pytest.raises(InputError, match=f"{tmp_path} cannot be written to; choose another"):
        refuse_existing(tmp_path / "new" / "table.csv", force=False)
