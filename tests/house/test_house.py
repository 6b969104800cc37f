"""The repository keeps its own rules, and each rule notices a defect made on purpose."""

from pathlib import Path

import house_rules as rules
import pytest

ROOT = Path(__file__).resolve().parents[2]

CHECKS = [
    rules.long_files,
    rules.long_functions,
    rules.wrong_way_imports,
    rules.unknown_packages,
    rules.talkative_kernels,
    rules.stray_entries,
    rules.forbidden_words,
    rules.excuses,
    rules.swallowed,
    rules.undocumented,
]


@pytest.mark.parametrize("check", CHECKS, ids=lambda check: check.__name__)
def test_the_repository_keeps_the_rule(check):
    assert check(ROOT) == []


def test_the_rules_see_the_repository():
    seen = {path.relative_to(ROOT).as_posix() for path in rules.files(ROOT)}
    assert {"pyproject.toml", "src/spatiq/errors.py", "tests/house/test_house.py"} <= seen
    assert not [n for n in seen if "__pycache__" in n or n.startswith((".git/", ".venv"))]
    assert len(list(rules.python_files(ROOT))) > 30


def put(root, name, text):
    path = root / name
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_text(text)


def function(lines):
    return "def f():\n" + "    x = 1\n" * (lines - 1)


def joined(*pieces):
    """Text with a forbidden word, which must not stand in this file in one piece."""
    return "".join(pieces)


DEFECTS = [
    (rules.long_files, "src/spatiq/a.py", "x = 1\n" * 400, "x = 1\n" * 399),
    (rules.long_files, "tests/a.py", "x = 1\n" * 400, "x = 1\n" * 399),
    (rules.long_functions, "tools/a.py", function(61), function(60)),
    (
        rules.long_functions,
        "src/spatiq/a.py",
        "class C:\n    async def f(self):\n" + "        x = 1\n" * 60,
        "class C:\n    async def f(self):\n" + "        x = 1\n" * 59,
    ),
    (
        rules.wrong_way_imports,
        "src/spatiq/signal/a.py",
        "from spatiq.link.layout import Period\n",
        "from spatiq.kernels import kernel\n",
    ),
    (
        rules.wrong_way_imports,
        "src/spatiq/receiver/a.py",
        "def f():\n    import spatiq.metrics.intervals\n",
        "def f():\n    import spatiq.link.layout\n",
    ),
    (
        rules.wrong_way_imports,
        "src/spatiq/transmit/a.py",
        "from spatiq.receiver.options import ReceiverOptions\n",
        "from spatiq.recording.writing import write_recording\n",
    ),
    (
        rules.wrong_way_imports,
        "src/spatiq/link/a.py",
        "from spatiq import results\n",
        "from spatiq import signal\n",
    ),
    (
        rules.wrong_way_imports,
        "src/spatiq/link/a.py",
        "from . import layout\n",
        "from spatiq.link import layout\n",
    ),
    (
        rules.wrong_way_imports,
        "src/spatiq/errors.py",
        "import spatiq.signal\n",
        "import collections\n",
    ),
    (rules.unknown_packages, "src/spatiq/utils/a.py", "", None),
    (
        rules.talkative_kernels,
        "src/spatiq/signal/lfsr_kernels.py",
        "from spatiq.errors import InputError\n",
        "import numpy as np\nfrom spatiq.kernels import kernel\n",
    ),
    (
        rules.talkative_kernels,
        "src/spatiq/signal/lfsr_kernels.py",
        "import json\n",
        "import math\n",
    ),
    (rules.stray_entries, "notes.txt", "", None),
    (rules.forbidden_words, "README.md", joined("See sha", "red/design.md\n"), "shared clock\n"),
    (rules.forbidden_words, "src/a.py", joined("# a tran", "script\n"), "# a script\n"),
    (rules.forbidden_words, "tools/a.txt", joined("in /tm", "p/x\n"), "in out/tmp/x\n"),
    (rules.forbidden_words, "DEVELOPERS.md", joined("Issue", " 12\n"), "an issue of 12 dB\n"),
    (rules.forbidden_words, ".ci/run", joined("Seed", " document\n"), "the seed\n"),
    (rules.excuses, "tests/a.py", joined("import os  # no", "qa\n"), "import os\n"),
    (
        rules.excuses,
        "src/spatiq/a.py",
        joined("x = f()  # type: ig", "nore[arg-type]\n"),
        joined("x = f()  # type: ig", "nore[arg-type]  # the library's stub is wrong\n"),
    ),
    (
        rules.swallowed,
        "src/spatiq/a.py",
        "try:\n    f()\nexcept (ValueError, Exception):\n    x = 1\n",
        "try:\n    f()\nexcept Exception:\n    x = 1\n    raise\n",
    ),
    (
        rules.swallowed,
        "src/spatiq/a.py",
        "try:\n    f()\nexcept:\n    pass\n",
        "try:\n    f()\nexcept OSError:\n    pass\n",
    ),
    (rules.excuses, "tests/a.py", joined("@pytest.mark.x", "fail\n"), "@pytest.mark.nojit\n"),
    (rules.undocumented, "src/spatiq/a.py", "x = 1\n", '"""What for."""\n'),
    (
        rules.undocumented,
        "src/spatiq/a.py",
        '"""A."""\nclass C:\n    """C."""\n    def f(self): ...\n',
        '"""A."""\nclass C:\n    """C."""\n    def _f(self): ...\n',
    ),
]


@pytest.mark.parametrize(("check", "name", "bad", "good"), DEFECTS)
def test_a_deliberate_defect_trips_the_rule(tmp_path, check, name, bad, good):
    put(tmp_path, name, bad)
    assert len(check(tmp_path)) == 1
    if good is not None:
        put(tmp_path, name, good)
        assert check(tmp_path) == []


def test_every_rule_has_a_defect():
    assert {check for check, *_ in DEFECTS} == set(CHECKS)


def test_every_forbidden_word_and_excuse_is_found(tmp_path):
    samples = {
        "a": joined("trans", "cript"),
        "b": joined("seed", " document"),
        "c": joined("assist", "ant"),
        "d": joined("hel", "per session"),
        "e": joined("language", " model"),
        "f": joined("the C", "EO"),
        "g": joined("issue", " #3"),
        "h": joined(" /wo", "rk/x"),
        "i": joined(" /fa", "rm/x"),
        "j": joined(" /tm", "p/x"),
        "k": joined(" /ho", "me/x"),
        "l": joined(" /ro", "ot/x"),
        "m": joined(" sha", "red/x"),
        "n": joined("pypi", ".org"),
        "o": joined("python", "hosted"),
        "p": joined("proxy.", "golang"),
    }
    assert len(samples) == len(rules.FORBIDDEN)
    for name, text in samples.items():
        put(tmp_path, f"src/{name}.md", text)
    assert len(rules.forbidden_words(tmp_path)) == len(samples)


def test_ignored_files_are_left_out(tmp_path):
    put(tmp_path, ".gitignore", ".venv/\n/out/\n*.egg-info/\n")
    for name in (".venv/a.py", "out/a.py", "src/spatiq.egg-info/a.py", ".git/a.py"):
        put(tmp_path, name, "x = 1\n" * 500)
    assert list(rules.files(tmp_path)) == [tmp_path / ".gitignore"]
    assert rules.stray_entries(tmp_path) == []


def test_a_kernel_file_may_use_kernels_and_constants_of_other_files_and_nothing_else(tmp_path):
    source = (
        "from spatiq.kernels import kernel\n"
        "@kernel\ndef fast(): ...\n@cache\ndef slow(): ...\nSIZE = 1\n"
    )
    put(tmp_path, "src/spatiq/signal/b.py", source)
    user = "src/spatiq/signal/a_kernels.py"
    put(tmp_path, user, "from spatiq.signal.b import SIZE, fast, slow\n")
    assert rules.talkative_kernels(tmp_path) == [f"{user}:1: spatiq.signal.b slow"]
