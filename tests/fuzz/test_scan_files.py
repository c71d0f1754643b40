"""Scan files under attack: mutated text (F1) and every field with every kind of wrong value (F2).

Counts: 3,000 mutations (20,000 before a release), all fields x 21 values. Whatever comes in, the reader accepts it or
raises InputError, at once and naming the key.
"""

import random
import time
from pathlib import Path

import pytest

from gutz.errors import InputError
from gutz.scan import document, plan, spec

SCANS = sorted((Path(__file__).parents[2] / "scans").glob("*.toml"))
CORPUS = Path(__file__).parent / "corpus"

PIECES = [
    "[",
    "]",
    "=",
    '"',
    "\n",
    "nan",
    "inf",
    "-",
    "1e400",
    "{",
    "}",
    ",",
    ".",
    "true",
    "#",
    "'''",
    "\\",
    "\u202e",
    "0x",
    "[axes.x]\n",
    "9" * 40,
]


def mutate(text, rng):
    for _ in range(rng.randint(1, 4)):
        kind, place = rng.randrange(6), rng.randrange(len(text) + 1)
        other = rng.randrange(len(text) + 1)
        low, high = min(place, other), max(place, other)
        lines = text.splitlines(keepends=True)
        if kind == 0:
            text = text[:place] + rng.choice(PIECES) + text[place:]
        elif kind == 1:
            text = text[:place] + text[place + rng.randint(1, 8) :]
        elif kind == 2:
            text = text[:place] + chr(rng.randrange(1, 0x3000)) + text[place + 1 :]
        elif kind == 3 and high - low < 400:
            text = text[:high] + text[low:high] + text[high:]
        elif kind == 4 and lines:
            i, j = rng.randrange(len(lines)), rng.randrange(len(lines))
            lines[i], lines[j] = lines[j], lines[i]
            text = "".join(lines)
        elif kind == 5 and lines:
            del lines[rng.randrange(len(lines))]
            text = "".join(lines)
        text = text or "x"
    return text


def judge(text):
    """Read and check as the command line does; returns True if accepted."""
    try:
        found = spec.check(document.parse(text, "x.toml"))
    except InputError as error:
        assert str(error).startswith("x.toml: ")
        assert "Traceback" not in str(error) and "pydantic" not in str(error)
        return False
    if found.points <= 100_000:
        plan.plan(found)
    return True


def test_mutated_files_are_read_or_refused():
    rng = random.Random(1)
    texts = [path.read_text() for path in SCANS]
    slowest, accepted = 0.0, 0
    for _ in range(3000):
        text = mutate(rng.choice(texts), rng)
        start = time.process_time()
        accepted += judge(text)
        slowest = max(slowest, time.process_time() - start)
    assert 100 < accepted < 2900  # comments and numbers may change without harm
    assert slowest < 0.5  # the figure to reach is 50 ms; ten times that is a hang


def test_the_files_themselves_are_accepted():
    assert len(SCANS) >= 4
    assert all(judge(path.read_text()) for path in SCANS)


@pytest.mark.parametrize("path", sorted(CORPUS.glob("*.toml")), ids=lambda path: path.stem)
def test_what_once_broke_stays_refused(path):
    assert not judge(path.read_text())


SECTIONS = {
    "mixture": spec.MixtureSection,
    "lattice": spec.LatticeSection,
    "ansatz": spec.AnsatzSection,
    "output": spec.OutputSection,
    "axes.depth": spec.AxisSection,
}
WRONG = {
    "text": '"many"',
    "empty": '""',
    "bool": "true",
    "list": "[1, [2, 3], 4, 5]",
    "empty list": "[]",
    "table": "{a = 1}",
    "nan": "nan",
    "inf": "inf",
    "-inf": "-inf",
    "huge": "1e308",
    "overflow": "1e400",
    "tiny": "5e-324",
    "minus zero": "-0.0",
    "negative": "-1",
    "zero": "0",
    "long": "9" * 900,
    "date": "2026-01-01",
    "deep": "[" * 200 + "]" * 200,
    "unit": '"5 parsec"',
    "code": "\"__import__('os')\"",
    "long text": '"' + "x" * 900 + '"',
}


@pytest.mark.parametrize("section", SECTIONS)
def test_every_field_with_every_wrong_value(section):
    text = next(path for path in SCANS if path.stem == "rubidium-cubic").read_text()
    for key in SECTIONS[section].model_fields:
        for kind, value in WRONG.items():
            name = f"{section}.{key}"
            try:
                found = spec.check(document.parse(text, "x.toml", [f"{name}={value}"]))
                if found.points <= 100_000:
                    plan.check_physics(plan.plan(found))
            except InputError as error:
                message = str(error)
                # An axis that goes too far is named by the parameter it sets.
                named = (key, section.partition(".")[0], "depth")
                assert any(word in message for word in named), (name, kind, message)
                assert len(message) < 1500 and "Traceback" not in message
