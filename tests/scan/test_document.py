"""Reading scan files: hostile text (F3), line numbers, overrides."""

import time

import pytest

from gutz.errors import InputError
from gutz.scan import document

GOOD = '[mixture]\nU = 1.0\n\n[axes.mu]\nparameter = "mixture.mu"\n'

# F3: every one of these must be refused, at once and in one sentence.
HOSTILE = {
    "nested brackets": ("[mixture]\nU = " + "[" * 900, "nested too deeply"),
    "nested over lines": ("[mixture]\nU = " + "[\n" * 2000, "nested too deeply"),
    "dotted key": (".".join(["a"] * 20_000) + " = 1", "longer than 1000"),
    "long number": ("[mixture]\nU = " + "1" * 990 + "\nT = " + "9" * 995, None),
    "digits": ("[mixture]\nU = 1" + "0" * 5000, "longer than 1000"),
    "nul": ("[mixture]\nU = 1\0", "U+0000"),
    "direction override": ("[mixture]\nU = 1 # \u202e", "U+202E"),
    "zero width": ("[mix\u200bture]\nU = 1", "U+200B"),
    "line separator": ("[mixture]\u2028U = 1", "U+2028"),
    "not toml": ("[mixture\nU = 1", "not valid TOML"),
    "twice": ("[mixture]\nU = 1\nU = 2", "not valid TOML"),
}


@pytest.mark.parametrize("name", HOSTILE)
def test_hostile_text_is_refused_at_once(name):
    text, reason = HOSTILE[name]
    start = time.process_time()
    if reason is None:
        document.parse(text, "x.toml")  # long but lawful numbers: accepted here, refused as values
    else:
        with pytest.raises(InputError, match="x.toml") as caught:
            document.parse(text, "x.toml")
        assert reason in str(caught.value)
        assert len(str(caught.value)) < 300
    assert time.process_time() - start < 1.0


@pytest.mark.parametrize(
    "raw, reason",
    [
        (b"[mixture]\nU = \xff\xfe", "byte 14 is not UTF-8"),
        (b"#" * 900 + b"\n" + b"[a]\n" * 66_000, "larger than 256 KiB"),
    ],
)
def test_hostile_bytes_are_refused(tmp_path, raw, reason):
    path = tmp_path / "x.toml"
    path.write_bytes(raw)
    with pytest.raises(InputError) as caught:
        document.read(path)
    assert reason in str(caught.value)


def test_exactly_the_largest_size_is_read(tmp_path):
    path = tmp_path / "x.toml"
    path.write_bytes((b"#" * 511 + b"\n") * 512)
    assert path.stat().st_size == document.MAX_BYTES
    assert document.read(path).data == {}


def test_windows_text_is_read_as_written(tmp_path):
    """A byte-order mark and CRLF line ends are what some editors write; TOML allows the latter."""
    path = tmp_path / "x.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())
    assert document.read(path).data == document.parse(GOOD, "x").data


def test_missing_files_and_folders_are_one_sentence(tmp_path):
    with pytest.raises(InputError, match="nothing.toml: cannot be read"):
        document.read(tmp_path / "nothing.toml")
    with pytest.raises(InputError, match="is a folder"):
        document.read(tmp_path)


def test_no_path_is_kept(tmp_path):
    path = tmp_path / "x.toml"
    path.write_text(GOOD)
    assert document.read(path).name == "x.toml"


def test_lines_are_found():
    found = document.parse(GOOD, "x.toml")
    assert found.where("mixture.U") == "near line 2"
    assert found.where("axes.mu.parameter") == "near line 5"
    assert found.where("axes.mu.start") == "near line 4"  # absent key: its section
    assert found.where("lattice") == ""


@pytest.mark.parametrize(
    "text, value",
    [
        ("0.25", 0.25),
        ("[1, 2]", [1, 2]),
        ("1064 nm", "1064 nm"),
        ('"1064 nm"', "1064 nm"),
        ("0,1", "0,1"),
        ("true", True),
    ],
)
def test_overrides_take_toml_or_text(text, value):
    found = document.parse(GOOD, "x.toml", [f"mixture.T={text}", "axes.mu.points=4"])
    assert found.data["mixture"]["T"] == value
    assert found.data["axes"]["mu"]["points"] == 4
    assert found.where("mixture.T") == "from --set"


@pytest.mark.parametrize(
    "override", ["T=1", "mixture.T", "mixture.=1", "mix ture.T=1", "mixture.U.x=1", "a.b=" + "1" * 2000]
)
def test_bad_overrides_are_refused(override):
    with pytest.raises(InputError, match="--set"):
        document.parse(GOOD, "x.toml", [override])


def test_an_override_cannot_smuggle_lines():
    with pytest.raises(InputError, match="one line"):
        document.parse(GOOD, "x.toml", ["mixture.T=1\n[axes.x]"])
