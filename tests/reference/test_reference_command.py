"""`gutz reference`: what it prints, writes and returns."""

import json

import filelock
import pytest

from gutz.cli import main
from gutz.reference import store

PLAN = """
[[entry]]
name = "exact-a"
species = 2
t = 1.0
U12 = 4.0
filling = 0.5
method = "Bethe ansatz"
[[entry]]
name = "exact-b"
species = 2
t = 1.0
U12 = -4.0
filling = 0.5
method = "Bethe ansatz"
"""


@pytest.fixture
def plan_file(tmp_path):
    path = tmp_path / "mine.toml"
    path.write_text(PLAN)
    return path


def run(capsys, *arguments):
    with pytest.raises(SystemExit) as stop:
        main([str(a) for a in arguments])
    printed = capsys.readouterr()
    return stop.value.code, printed.out, printed.err


def test_make_continue_list_verify(capsys, tmp_path, plan_file):
    out = tmp_path / "made"
    code, said, _ = run(capsys, "reference", "make", plan_file, "--out", out, "--only", "exact-b")
    assert code == 0 and said.startswith("entries: 1 made, 0 kept")
    code, said, _ = run(capsys, "reference", "make", plan_file, "--out", out, "--json")
    assert code == 0 and json.loads(said)["made"] == 1 and json.loads(said)["kept"] == 1
    file = out / "references.nc"
    assert list(store.read_all(file)) == ["exact-b", "exact-a"]
    code, said, _ = run(capsys, "reference", "list", "--file", file)
    assert code == 0 and "exact-a" in said and "infinite" in said
    code, said, _ = run(capsys, "reference", "verify", "--file", file, "--seed", 3)
    assert code == 0 and "all numbers came out again" in said


def test_a_wrong_number_ends_with_code_1(capsys, tmp_path, plan_file):
    run(capsys, "reference", "make", plan_file, "--out", tmp_path / "made")
    file = tmp_path / "made" / "references.nc"
    wrong = store.read(file, "exact-a")
    wrong["exact_gap"].values[...] += 0.01
    store.write(file, "exact-a", wrong)
    code, said, _ = run(capsys, "reference", "verify", "exact-a", "--file", file)
    assert code == 1 and "NOT all numbers" in said
    code, said, _ = run(capsys, "reference", "verify", "exact-b", "--file", file, "--json")
    assert code == 0 and json.loads(said)["passed"] is True


def test_a_file_in_use_and_names_that_are_not_there(capsys, tmp_path, plan_file):
    out = tmp_path / "made"
    code, _, words = run(capsys, "reference", "make", plan_file, "--out", out, "--only", "exact-c")
    assert code == 2 and 'did you mean "exact-' in words
    out.mkdir(exist_ok=True)
    with filelock.FileLock(out / "references.nc.lock"):
        code, _, words = run(capsys, "reference", "make", plan_file, "--out", out)
    assert code == 4 and "another run" in words


def test_too_large_a_plan_is_refused_before_anything_is_computed(capsys, tmp_path):
    plan = tmp_path / "large.toml"
    plan.write_text(
        PLAN + '[[entry]]\nname = "big"\nspecies = 2\nt = 1.0\nU = 9.0\nfilling = 1.0\nlengths = [100, 200]\n'
        "n_max = 12\nbond = 2000\n"
    )
    code, _, words = run(capsys, "reference", "make", plan, "--out", tmp_path / "made")
    assert code == 5 and "GB" in words and "smaller" in words
    assert not (tmp_path / "made" / "references.nc").exists()


def test_the_stored_set_verifies(capsys):
    code, said, _ = run(capsys, "reference", "verify", "hardcore-half-T-0.5")
    assert code == 0, said
