"""Checking scan files: every mistake in one pass, words of every message (F5), misspelt keys (F6), identity."""

import itertools
import json
import random
import string

import pytest
from conftest import LATTICE, MIXTURE

from gutz.errors import InputError
from gutz.scan import document, fields, spec


def check(text, *overrides):
    return spec.check(document.parse(text, "x.toml", overrides))


def refusal(text, *overrides):
    with pytest.raises(InputError) as caught:
        check(text, *overrides)
    return str(caught.value)


def test_all_mistakes_come_in_one_pass_with_their_lines():
    text = MIXTURE.replace("T = 0.1", "T = -1").replace("U12 =", "U21 =").replace("points = 30", "points = 1")
    first, *rest = refusal(text).splitlines()
    assert first == "x.toml: 3 mistakes, nothing was computed"
    assert sorted(rest) == [
        "  axes.hop.points (near line 17): 1 is not allowed; it must be a whole number from 2 to 10,000,000",
        "  mixture.T (near line 5): -1 is not allowed; it must be a finite number, at least 0",
        '  mixture.U21 (near line 4): unknown key; did you mean "U12"?',
    ]


# F5: one example of every kind of message, word for word. "key: words" stands for "x.toml: key (from --set): words",
# "= words" for "x.toml: words"; None where only the form is looked at.
MESSAGES = [
    (MIXTURE, ["mixture.T=nan"], "mixture.T: nan is not allowed; it must be a finite number, at least 0"),
    (MIXTURE, ["mixture.T=1e400"], "mixture.T: inf is not allowed; it must be a finite number, at least 0"),
    (MIXTURE, ["mixture.T=true"], "mixture.T: true is not allowed; it must be a finite number, at least 0"),
    (MIXTURE, ["mixture.T=5 nK"], 'mixture.T: "5 nK" is not allowed; without [lattice] it must be a number'),
    (MIXTURE, ["mixture.dim=4"], "mixture.dim: 4 is not allowed; it must be a whole number from 1 to 3"),
    (MIXTURE, ["mixture.filling=0.5"], "= mixture (near line 1): both mu and filling are given; give exactly one"),
    (MIXTURE, ["mixture.entropy=1"], "= mixture (near line 1): both T and entropy are given; give at most one"),
    (
        MIXTURE,
        ["mixture.U=[1,2,3]"],
        "mixture.U: [1, 2, 3] is not allowed; it must be one value, or a list of one per species",
    ),
    (MIXTURE, ["mixture.U=[1]"], "mixture.U: has 1 entries; it must have 2, one per species"),
    (MIXTURE, ["mixture.species=1"], "= mixture.U12 (near line 4): must be left out, because there is one species"),
    (MIXTURE, ["ansatz.kind=produkt"], 'ansatz.kind: "produkt" is not allowed; it must be "product" or "dressed"'),
    (MIXTURE, ['output.figures=["fase"]'], 'output.figures: holds "fase", which is not known; did you mean "phase"?'),
    (MIXTURE, ["tarp.N=20"], '= tarp: unknown section; did you mean "trap"?'),
    (MIXTURE, ["axis.mu=3"], '= axis: unknown section; did you mean "axes"?'),
    (MIXTURE, ["mixture.depth=3"], "mixture.depth: unknown key; it belongs in [lattice]"),
    (
        MIXTURE,
        ["axes.hop.parameter=mixture.k"],
        'axes.hop.parameter: "mixture.k" is not a parameter an axis can run over; did you mean "mixture.t"?',
    ),
    (
        MIXTURE,
        ["axes.hop.parameter=lattice.depth", "mixture.t=0.1", "axes.hop.start=1"],
        "axes.hop.parameter: lattice.depth needs a [lattice] section",
    ),
    (
        MIXTURE,
        ["mixture.t=0.1", "axes.hop.parameter=mixture.mu"],
        "axes.hop.parameter: mixture.mu is already set by axes.mu",
    ),
    (
        MIXTURE,
        ["axes.hop.parameter=mixture.U12.1"],
        'axes.hop.parameter: "mixture.U12.1" cannot be addressed further than mixture.U12',
    ),
    (MIXTURE, ["axes.hop.stop=0"], "axes.hop.stop: 0 is not allowed; it must differ from start"),
    (MIXTURE, ["axes.hop.start=-1"], "= axes.hop (near line 13): starts or ends at -1; mixture.t must be at least 0"),
    (
        MIXTURE,
        ["axes.hop.spacing=log"],
        "= axes.hop.start (near line 15): 0 is not allowed; it must be greater than 0 for log spacing",
    ),
    (MIXTURE, ["axes.hop.points=4000000"], "= axes: together give 160,000,000 points; at most 100,000,000 are allowed"),
    (MIXTURE, ["axes.hop.values=[1,2]"], None),
    (MIXTURE, ["axes.hop.unit=nK"], 'axes.hop.unit: "nK" is not allowed; it must be left out for this parameter'),
    (LATTICE, ["mixture.t=0.1"], "mixture.t: must be left out, because it follows from [lattice]"),
    (LATTICE, ["lattice.a12=90"], 'lattice.a12: 90 needs a unit, for example "100.4 a0" or "1064 nm"'),
    (LATTICE, ["lattice.wavelength=1064 parsec"], None),
    (LATTICE, ["mixture.mu=0.3", "mixture.filling=0.5"], None),
    (LATTICE, ["axes.T.unit=bananas"], None),
]


@pytest.mark.parametrize("text, overrides, expected", MESSAGES)
def test_messages_name_key_value_and_rule(text, overrides, expected):
    message = refusal(text, *overrides)
    if expected is not None:
        key, _, words = expected.partition(": ")
        whole = expected.removeprefix("= ") if expected.startswith("= ") else f"{key} (from --set): {words}"
        assert message == f"x.toml: {whole}"
    assert message.startswith("x.toml: ")
    assert len(message.splitlines()) <= 4
    key = overrides[0].partition("=")[0]
    assert key in message or key.split(".")[0] in message
    assert "pydantic" not in message and "Traceback" not in message


def test_missing_settings_are_named():
    message = refusal("[mixture]\nT = 0.1\n")
    for words in (
        "neither mu nor filling is given",
        "mixture.t (near line 1): is missing",
        "mixture.U (near line 1): is missing",
    ):
        assert words in message
    message = refusal('[lattice]\natoms = ["87Rb", "41K"]\n[mixture]\nmu = "0.3 U1"\n')
    for key in ("wavelength", "depth", "a11", "a22", "a12"):
        assert f"lattice.{key} (near line 1): is missing" in message


def test_energies_of_a_lattice_need_units():
    message = refusal(LATTICE.replace("filling = 0.5", "mu = 0.3"))
    assert "mixture.mu (near line 10): 0.3 needs a unit" in message
    assert "axes.T.unit" in refusal(LATTICE.replace('unit = "nK"\n', ""))
    assert check(LATTICE.replace("filling = 0.5", 'mu = ["0.3 U1", "100 Hz"]')).points == 20


def test_every_key_of_every_section_is_known_to_the_suggestions():
    """F6: 200 one-edit misspellings, at least 95 % get the right suggestion."""
    rng = random.Random(20)
    sections = {
        "mixture": spec.MixtureSection, "lattice": spec.LatticeSection, "ansatz": spec.AnsatzSection,
        "output": spec.OutputSection, "axes.hop": spec.AxisSection,
    }  # fmt: skip
    everything = {key for section in sections.values() for key in section.model_fields}
    cases = []
    pool = [(name, key) for name, section in sections.items() for key in section.model_fields]
    while len(cases) < 200:
        name, key = rng.choice(pool)
        wrong = _one_edit(key, rng)
        if wrong and wrong not in everything:
            cases.append((name, key, wrong))
    right = 0
    for name, key, wrong in cases:
        base = LATTICE if name == "lattice" else MIXTURE
        right += f'did you mean "{key}"?' in refusal(base, f"{name}.{wrong}=1")
    assert right >= 190, f"{right} of 200"


def _one_edit(key, rng):
    letters = string.ascii_lowercase + "_"
    place = rng.randrange(len(key))
    # A single letter that is dropped or changed leaves nothing to recognise, so short keys only grow.
    kinds = ["add"] if len(key) < 3 else ["add", "drop", "change", "swap"]
    kind = rng.choice(kinds)
    if kind == "add":
        return key[:place] + rng.choice(letters) + key[place:]
    if kind == "drop":
        return key[:place] + key[place + 1 :]
    if kind == "change":
        return key[:place] + rng.choice(letters) + key[place + 1 :]
    return key[:place] + key[place : place + 2][::-1] + key[place + 2 :]


def test_nearest_is_an_edit_distance():
    """The distance obeys its definition on short words: compared with a search over edits, common practice."""
    alphabet = "ab"
    words = ["".join(w) for n in range(4) for w in itertools.product(alphabet, repeat=n)]

    def neighbours(word):
        for i in range(len(word) + 1):
            yield from (word[:i] + letter + word[i:] for letter in alphabet)
            if i < len(word):
                yield word[:i] + word[i + 1 :]
                yield from (word[:i] + letter + word[i + 1 :] for letter in alphabet)
            if i + 1 < len(word):
                yield word[:i] + word[i + 1] + word[i] + word[i + 2 :]

    for word in words:
        one = set(neighbours(word)) - {word}
        for other in words:
            assert (fields._edits(word, other) == 1) == (other in one)


def test_identity_ignores_spelling_and_follows_meaning():
    base = check(MIXTURE)
    assert check(MIXTURE.replace("U = 1.0", "U = 1  # same")).sha256() == base.sha256()
    assert check(MIXTURE, "mixture.dim=3").sha256() == base.sha256()
    assert check(MIXTURE, "mixture.dim=2").sha256() != base.sha256()
    assert json.loads(base.canonical())["mixture"]["n_max"] is None


def test_differences_name_every_changed_setting():
    """S8: single changes, each found; 50 of them over the keys of two files."""
    changes = [
        *(("mixture", f"mixture.T={0.2 + i / 100}") for i in range(20)),
        *(("mixture", f"axes.mu.points={41 + i}") for i in range(10)),
        *(("lattice", f"lattice.a12={70 + i} a0") for i in range(10)),
        *(("lattice", f"lattice.depth={13 + i}") for i in range(5)),
        *(("lattice", f"axes.T.unit={unit}") for unit in ("uK", "Hz", "kHz", "U1", "E_R")),
    ]
    assert len(changes) == 50
    texts = {"mixture": MIXTURE, "lattice": LATTICE}
    for name, override in changes:
        old, new = check(texts[name]), check(texts[name], override)
        assert old.sha256() != new.sha256()
        found = [*spec.differences(old.canonical(), new.canonical())]
        assert len(found) == 1
        assert found[0].startswith(override.partition("=")[0] + ": ")


def test_five_axes_are_the_most():
    axis = '[axes.{name}]\nparameter = "{parameter}"\nvalues = [0.1, 0.2]\n'
    names = ["mixture.t", "mixture.U", "mixture.U12", "mixture.mu", "mixture.T", "mixture.offset"]
    text = "[mixture]\nn_max = 3\n" + "".join(axis.format(name="abcdef"[i], parameter=p) for i, p in enumerate(names))
    assert "there are 6 axes; at most 5" in refusal(text)
    assert check(text.rpartition("[axes")[0]).points == 32


@pytest.mark.parametrize("name", ["filling", "phase", "species", "U"])
def test_axes_may_not_take_the_names_of_outputs(name):
    text = MIXTURE.replace("[axes.hop]", f"[axes.{name}]")
    assert f'"{name}" is the name of an output' in refusal(text)


@pytest.mark.parametrize("name", ["t", "hop", "t_over_U"])
def test_an_axis_may_be_called_after_the_input_it_sets(name):
    assert name in check(MIXTURE.replace("[axes.hop]", f"[axes.{name}]")).axes


def test_axes_may_not_overlap_but_may_share():
    both = MIXTURE.replace('"mixture.mu"', '"mixture.t.1"').replace("[axes.mu]", "[axes.first]")
    assert "already set" in refusal(both.replace("T = 0.1", "T = 0.1\nmu = 0.4"))
    shared = both.replace('"mixture.t"', '"mixture.t.2"').replace("T = 0.1", "T = 0.1\nmu = 0.4")
    assert check(shared).points == 1200
