"""Results written into the card and the README: blocks by name, and the scripts' help."""

import importlib.util
import subprocess
import sys
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from rows import examples

from artifactlens.curves import Curve, Head, Model, Table, logistic
from artifactlens.errors import LabelsError
from artifactlens.features.catalogue import FEATURE_NAMES
from artifactlens.kinds import KIND_NAMES
from artifactlens.training.evaluation.card import fill
from artifactlens.training.examples import CLEAN
from artifactlens.training.realchecks.agreement import separation

SCRIPTS = Path(__file__).resolve().parents[1] / "scripts"


def script(name):
    """A script as a module."""
    spec = importlib.util.spec_from_file_location(name, SCRIPTS / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def evaluate():
    return script("evaluate")


def block(name, content="old"):
    return f"<!-- results: {name} -->\n{content}\n<!-- end results -->"


# A block -------------------------------------------------------------------------------


def test_a_block_is_filled_and_nothing_else_changes():
    text = f"# Card\n\n{block('a')}\n\nwords\n\n{block('b')}\nend\n"
    found = fill(text, "b", "\n| x |\n| y |\n\n")
    assert found == text.replace(block("b"), block("b", "| x |\n| y |"))
    assert fill(found, "b", "| x |\n| y |") == found


def test_an_empty_block_can_be_filled():
    text = "<!-- results: a -->\n<!-- end results -->\n"
    assert fill(text, "a", "new") == block("a", "new") + "\n"


@given(st.text(alphabet="ab\\1\\g<0>{}|$\n-.%&", max_size=40))
def test_any_content_is_taken_as_it_stands(content):
    text = f"before\n{block('x')}\nafter"
    assert fill(text, "x", content) == f"before\n{block('x', content.strip())}\nafter"


@pytest.mark.parametrize(
    ("text", "count"),
    [
        ("no block", 0),
        (block("reserve"), 0),
        (block("reserved clean record"), 0),
        (f"{block('reserved')}\n{block('reserved')}", 2),
        ("<!-- results: reserved -->\nnever ended", 0),
    ],
)
def test_not_exactly_one_block_is_refused_with_what_to_put_in(text, count):
    with pytest.raises(
        LabelsError, match=f"named reserved is needed; there are {count}"
    ) as e:
        fill(text, "reserved", "new")
    assert "<!-- results: reserved -->" in e.value.remedy
    assert "<!-- end results -->" in e.value.remedy


def test_signs_in_a_name_stand_for_themselves():
    text = f"{block('a.c')}\n{block('abc')}"
    assert fill(text, "a.c", "new") == f"{block('a.c', 'new')}\n{block('abc')}"


# Both texts and the figures ------------------------------------------------------------

FOUND = {
    "reserved": "| eye | 0.9 |",
    "real transfer": "| both | 0.8 |",
    "by montage": "| ears |",
    "figure roc.svg": "<svg>roc</svg>",
    "figure strength.svg": "<svg>strength</svg>",
}


@pytest.fixture
def texts(tmp_path):
    """A toy card and a toy README with their blocks."""
    card, readme = tmp_path / "models" / "CARD.md", tmp_path / "README.md"
    card.parent.mkdir()
    blocks = [block(name) for name in FOUND if not name.startswith("figure")]
    card.write_text("# µ card\n" + "\n\n".join(blocks) + "\n", encoding="utf-8")
    readme.write_text(
        f"# Read\n{block('real transfer')}\n{block('reserved')}\n", encoding="utf-8"
    )
    return SimpleNamespace(card=card, readme=readme, folder=tmp_path)


def contents(folder):
    return {
        str(path.relative_to(folder)): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def test_every_result_goes_to_its_block_and_figures_lie_beside_the_card(evaluate, texts):
    evaluate.write(texts.card, texts.readme, FOUND)
    card = texts.card.read_text(encoding="utf-8")
    for name, content in FOUND.items():
        assert (block(name, content) in card) != name.startswith("figure")
    assert card.startswith("# µ card\n")
    assert "old" not in card
    readme = texts.readme.read_text(encoding="utf-8")
    assert readme == (
        f"# Read\n{block('real transfer', '| both | 0.8 |')}\n"
        f"{block('reserved', '| eye | 0.9 |')}\n"
    )
    assert set(contents(texts.folder)) == {
        "README.md", "models/CARD.md", "models/roc.svg", "models/strength.svg",
    }  # fmt: skip
    assert (texts.card.parent / "roc.svg").read_text(encoding="utf-8") == "<svg>roc</svg>"


def test_the_same_results_leave_the_same_bytes(evaluate, texts):
    evaluate.write(texts.card, texts.readme, FOUND)
    once = contents(texts.folder)
    evaluate.write(texts.card, texts.readme, FOUND)
    assert contents(texts.folder) == once


@pytest.mark.parametrize(
    ("which", "name"),
    [("card", "by montage"), ("card", "reserved"), ("readme", "real transfer")],
)
def test_a_missing_block_is_refused_and_nothing_is_written(evaluate, texts, which, name):
    path = getattr(texts, which)
    path.write_text(
        path.read_text(encoding="utf-8").replace(block(name), ""), encoding="utf-8"
    )
    before = contents(texts.folder)
    with pytest.raises(LabelsError, match=f"named {name} is needed"):
        evaluate.write(texts.card, texts.readme, FOUND)
    assert contents(texts.folder) == before


def test_both_texts_have_the_blocks_that_are_filled(evaluate):
    """The shipped README and card, with the names that stand in the script."""
    root = SCRIPTS.parent
    readme = (root / "README.md").read_text(encoding="utf-8")
    card = (root / "models" / "MODEL_CARD.md").read_text(encoding="utf-8")
    names = [
        "development", "additive", "ablation", "clean record", "reserved", "strength",
        "look-alikes", *(f"by {aspect}" for aspect in evaluate.ASPECTS), "baselines",
        "reserved clean record", "real eegmmidb-001", "real gestures", "real transfer",
        "real gestures grouped", "eye leads", "look-alikes on real record", "eog",
    ]  # fmt: skip
    for name in names:
        fill(card, name, "new")
    for name in ("reserved", "real transfer"):
        fill(readme, name, "new")
    assert card.count("<!-- results: ") == len(names)


# What is filled in ---------------------------------------------------------------------


def test_rows_score_as_the_model_scores_a_recording(evaluate):
    first, second = FEATURE_NAMES[:2]
    curve = Curve(np.array([0.0]), np.array([-1.0, 2.0]), 0.5)
    table = Table(np.array([0.0]), np.zeros(0), np.array([[0.0, 0], [3, 0], [0, 7]]))
    heads = tuple(
        Head(kind, -1.0, {first: curve}, 0.9, 0.5,
             {(first, second): table} if kind == "pop" else {})
        for kind in KIND_NAMES
    )  # fmt: skip
    features = np.zeros((4, len(FEATURE_NAMES)), np.float32)
    features[:, 0] = [-1, 1, np.nan, np.nan]
    features[:, 1] = [5, 5, 5, np.nan]
    rows = examples([CLEAN] * 4, features=features)
    model = Model("small", "", heads, {})
    found = evaluate.scored(model, rows)
    plain = [-1 - 1, -1 + 2, -1 + 0.5, -1 + 0.5]
    np.testing.assert_allclose(found["eye"], logistic(np.array(plain)))
    paired = np.array(plain) + np.array([0, 3, 0, 7])
    np.testing.assert_allclose(found["pop"], logistic(paired))
    assert evaluate.marks_of(model) == dict.fromkeys(KIND_NAMES, (0.9, 0.5))


def test_the_table_of_transfer_has_a_row_per_source_person_and_kind(evaluate):
    truth = np.array([1, 1, 0, 0], np.int8)
    half = separation(truth, np.array([0.9, 0.1, 0.5, 0.6]), {})
    full = separation(truth, np.array([0.9, 0.8, 0.5, 0.6]), {})
    pages = SimpleNamespace(seconds={"muscle": full, "eye": half, "pop": half})
    text = evaluate.transfer_table(
        [
            ("simulation", "eegmmidb-001", pages),
            ("both", "gestures", SimpleNamespace(kinds={"eye": full})),
            ("both", "clinical_absence", SimpleNamespace(separation=half)),
        ]
    )
    rows = [line for line in text.splitlines() if line.startswith("| ")][2:]
    assert rows == [
        "| simulation | eegmmidb-001 | eye | 2 | 2 | 0.500 | 0.500 |",
        "| simulation | eegmmidb-001 | muscle | 2 | 2 | 1.000 | 1.000 |",
        "| both | gestures | eye | 2 | 2 | 1.000 | 1.000 |",
        "| both | clinical_absence | eye | 2 | 2 | 0.500 | 0.500 |",
    ]
    assert text.startswith("**REAL")


# As programs ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("program", "options"),
    [
        ("train.py", ("--corpora", "--corpus", "--out", "--jobs")),
        ("evaluate.py", ("--corpora", "--card", "--readme", "--jobs")),
    ],
)
def test_a_script_tells_its_options(program, options):
    done = subprocess.run(
        [sys.executable, str(SCRIPTS / program), "--help"],
        capture_output=True, text=True, timeout=120, cwd=SCRIPTS.parent,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert "usage:" in done.stdout
    for option in options:
        assert option in done.stdout


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["--corpus", "clinical_absence=there"], "needs NAME=PATH with a name of eegmat"),
        (["--corpora", "nowhere"], "eegmat is needed as a folder"),
    ],
)
def test_train_refuses_in_words_what_it_cannot_learn_from(
    monkeypatch, capsys, tmp_path, arguments, words
):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "argv", ["train.py", *arguments, "--out", "model.json"])
    assert script("train").main() == 1
    assert words in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []
