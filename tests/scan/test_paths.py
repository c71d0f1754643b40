"""X3: hostile output names are refused, or everything stays inside the folder."""

import pytest

from gutz.errors import InputError, OutputError
from gutz.scan import paths


@pytest.mark.parametrize("name", ["a\0b", "a\nb", "a\u202eb", "\u200b", "", "  ", "x" * 300, "a/" * 3000])
def test_hostile_folders_are_refused(name):
    with pytest.raises(InputError, match="--out"):
        paths.output_folder(name)


@pytest.mark.parametrize("name", ["CON", "trailing.", "with space", "ünïcode", "a/b/c", "../sibling"])
def test_odd_folders_are_the_users_choice(tmp_path, monkeypatch, name):
    home = tmp_path / "home"
    home.mkdir()
    monkeypatch.chdir(home)
    folder = paths.output_folder(name)
    assert folder.is_relative_to(tmp_path)
    paths.make_folder(folder)
    assert folder.is_dir()


@pytest.mark.parametrize("name", ["..", ".", "", "a/b", "../x", "/etc/passwd", "a/../../b"])
def test_only_plain_names_inside(tmp_path, name):
    with pytest.raises(OutputError, match="plain name"):
        paths.inside(tmp_path, name)


def test_links_out_of_the_folder_are_refused(tmp_path):
    folder, outside = tmp_path / "out", tmp_path / "elsewhere"
    folder.mkdir()
    outside.mkdir()
    (folder / "data.zarr").symlink_to(outside)
    (folder / "phase.png").symlink_to(outside / "new.png")
    for name in ("data.zarr", "phase.png"):
        with pytest.raises(OutputError, match="link to somewhere else"):
            paths.inside(folder, name)


def test_a_link_within_the_folder_is_fine(tmp_path):
    (tmp_path / "real").mkdir()
    (tmp_path / "alias").symlink_to(tmp_path / "real")
    assert paths.inside(tmp_path, "alias") == tmp_path / "alias"


def test_a_file_in_the_way_is_said(tmp_path):
    (tmp_path / "taken").write_text("mine")
    with pytest.raises(OutputError, match="taken: is a file"):
        paths.output_folder(str(tmp_path / "taken"))
    with pytest.raises(OutputError, match="cannot be made"):
        paths.make_folder(tmp_path / "taken" / "below")


def test_replacing_is_all_or_nothing(tmp_path):
    """K11: synced before the rename, folder synced after it."""
    new, final = tmp_path / "x.partial", tmp_path / "x"
    final.write_text("old")
    new.write_text("new")
    paths.replace_durably(new, final)
    assert final.read_text() == "new"
    assert not new.exists()
