"""Plan files: what they may say, and one clear sentence for everything else."""

import pytest

from gutz.errors import InputError, ResourceError
from gutz.reference import plan
from gutz.scan import document

GOOD = """
[defaults]
t = 1.0
lengths = [4, 6]
[[entry]]
name = "pair"
species = 2
U = 8.0
filling = 0.5
vary = {U12 = [-2.0, 3.5]}
n_max = 2
[[entry]]
name = "warm"
species = 1
T = 0.5
mu = 0.0
method = "free fermions"
"""


def read(text):
    return plan.entries(document.parse(text, "plan.toml"))


def test_defaults_and_families():
    first, second, warm = read(GOOD)
    assert (first.name, second.name, warm.name) == ("pair--2", "pair-3.5", "warm")
    assert (first.U, first.U12, second.U12, first.filling) == ((8.0, 8.0), -2.0, 3.5, (0.5, 0.5))
    assert warm.mu == (0.0,) and warm.filling == ()


def test_identity_follows_the_settings_and_survives_storage():
    first, second, _ = read(GOOD)
    assert first.sha256() != second.sha256()
    assert plan.restore(first.canonical()) == first
    assert read(GOOD)[0].sha256() == first.sha256()


ENTRY = '[[entry]]\nname = "a"\nspecies = 1\nt = 1.0\nfilling = 0.5\nlengths = [4, 6]\nn_max = 2\n'


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "at least one"),
        ("[entries]\n", "unknown section"),
        (ENTRY.replace("filling = 0.5", "fillings = 0.5"), 'did you mean "filling"'),
        (ENTRY.replace("t = 1.0\n", ""), "t is missing"),
        (ENTRY.replace("t = 1.0", "t = 0.0"), "greater than 0"),
        (ENTRY.replace("t = 1.0", "t = [1.0, 2.0]"), "one per species"),
        (ENTRY.replace('"a"', '"a/b"'), "letters"),
        (ENTRY.replace("[4, 6]", "[4]"), "at least two"),
        (ENTRY.replace("[4, 6]", "[6, 4]"), "must rise"),
        (ENTRY.replace("[4, 6]", "[4, 7]"), "whole number of atoms on 7"),
        (ENTRY.replace("[4, 6]", "[4, 1000]"), "from 4 to 200"),
        (ENTRY + 'method = "guesses"\n', "must be"),
        (ENTRY + "T = 0.5\n", "above 0 for thermal sweeps"),
        (ENTRY + 'T = 0.5\nmethod = "thermal sweeps"\n', "give mu alone"),
        (ENTRY + 'method = "free fermions"\n', "one hard-core species"),
        (ENTRY + 'method = "Bethe ansatz"\n', "half filling"),
        (ENTRY + "noise_length = 5\n", "one of the lengths"),
        (ENTRY + "noise_length = 80\n", "from 0 to 72"),
        (ENTRY + "gaps = 1\n", "true or false"),
        (ENTRY + "vary = {bond = [10, 20]}\n", "vary holds"),
        (ENTRY + ENTRY, "given twice"),
    ],
)
def test_mistakes_are_named(text, words):
    with pytest.raises(InputError, match=words) as caught:
        read(text)
    assert "plan.toml" in str(caught.value)
    assert len(str(caught.value).splitlines()) == 1


def test_what_does_not_fit_in_memory_is_refused():
    (entry,) = read(ENTRY + "bond = 2000\n")
    plan.check_memory(entry, 1e12)
    with pytest.raises(ResourceError, match="smaller bond"):
        plan.check_memory(entry, entry.memory / 2)
