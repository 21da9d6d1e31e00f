"""The set up of .venv: when it acts, what it heals, what it says. No network: pip is a stand-in."""

import importlib.util
import json
import os
import signal
import subprocess
import sys
import textwrap
import time
from pathlib import Path

import pytest

from tools import setup_env

ROOT = Path(__file__).parents[2]
TOOLS = ROOT / "tools"
LOCK_NAMES = ("requirements.lock", "requirements-test.lock", "requirements-dev.lock")
HASH = "--hash=sha256:" + "0" * 64

# Lies where pip would. It installs by making the folder that names a package, and does what the
# file "pip-orders" in the project's folder says.
STAND_IN_PIP = """
    import os, pathlib, re, sys, time
    here = pathlib.Path(__file__).parents[1]
    project = here.parents[3]
    orders = project / "pip-orders"
    order = orders.read_text() if orders.exists() else ""
    arguments = sys.argv[1:]
    with (project / "pip-calls").open("a") as file:
        file.write(" ".join(arguments[2:]) + "\\n")
    if "uninstall" in arguments:
        for name in arguments[arguments.index("--yes") + 1:]:
            (here / f"{name}-1.dist-info").rmdir()
        sys.exit()
    names = re.findall(r"^(\\S+)==", pathlib.Path(arguments[-1]).read_text(), re.M)
    for name in names:
        print(f"Collecting {name}==1")
    if order == "offline":
        sys.exit("ERROR: no route to the index")
    print("Installing collected packages: " + ", ".join(names))
    if order == "elsewhere":
        sys.exit()
    for name in names:
        (here / f"{name}-1.dist-info").mkdir(exist_ok=True)
        if order == "hang":
            (project / "pip-process").write_text(str(os.getpid()))
            time.sleep(60)
"""


def lock_text(*names):
    return "".join(f"{name}==1 \\\n    {HASH}\n" for name in names)


def make_stand_in_venv(venv, guard):
    """A virtual environment with a stand-in for pip."""
    del guard
    subprocess.run([sys.executable, "-m", "venv", "--without-pip", venv], check=True)
    import setup_packages

    pip = Path(setup_packages.site_packages_of(setup_env.venv_python(venv)), "pip")
    pip.mkdir()
    (pip / "__init__.py").write_text("")
    (pip / "__main__.py").write_text(textwrap.dedent(STAND_IN_PIP))


@pytest.fixture
def project(tmp_path, monkeypatch):
    """A folder with three small lock files; its path has a space."""
    folder = tmp_path / "lab plan"
    folder.mkdir()
    for name, packages in zip(LOCK_NAMES, (["a"], ["a", "b"], ["a", "b", "c"]), strict=True):
        (folder / name).write_text(lock_text(*packages))
    monkeypatch.syspath_prepend(str(TOOLS))
    import setup_packages

    monkeypatch.setattr(setup_packages, "make_venv", make_stand_in_venv)
    return folder


def stamp_of(project):
    return json.loads((project / ".venv" / setup_env.STAMP).read_text())


def packages_in(project):
    found = (project / ".venv").glob("lib/python*/site-packages/*.dist-info")
    return sorted(path.name.split("-")[0] for path in found)


def pip_calls(project):
    calls = project / "pip-calls"
    return calls.read_text().splitlines() if calls.exists() else []


def order_pip(project, order):
    (project / "pip-orders").write_text(order)


def test_first_set_up_installs_the_level_and_stamps_it(project, capsys):
    setup_env.set_up(str(project), "run")
    assert packages_in(project) == ["a"]
    assert stamp_of(project) == {
        "state": "complete",
        "level": "run",
        "lock_sha256": setup_env.lock_digest(str(project), "run"),
        "python": setup_env.version_text(sys.version_info),
        "folder": str(project / ".venv"),
    }
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == "Setting up .venv (level run) ..."
    assert lines[1].startswith("Set up: 1 packages in ")
    assert len(lines) == 2
    assert "--require-hashes" in pip_calls(project)[0]


@pytest.mark.parametrize(
    ("installed", "asked", "acts"),
    [
        ("run", "run", False),
        ("test", "run", False),
        ("dev", "run", False),
        ("dev", "test", False),
        ("dev", "dev", False),
        ("run", "test", True),
        ("run", "dev", True),
        ("test", "dev", True),
    ],
)
def test_a_higher_level_contains_the_lower_ones(project, capsys, installed, asked, acts):
    setup_env.set_up(str(project), installed)
    capsys.readouterr()
    setup_env.set_up(str(project), asked)
    assert (capsys.readouterr().out != "") is acts
    assert len(pip_calls(project)) == 1 + acts
    assert stamp_of(project)["level"] == (asked if acts else installed)


def test_a_changed_lock_file_is_installed_and_what_left_it_goes(project, capsys):
    setup_env.set_up(str(project), "dev")
    (project / "requirements-dev.lock").write_text(lock_text("a", "d"))
    capsys.readouterr()
    setup_env.set_up(str(project), "run")
    assert packages_in(project) == ["a", "d"]
    assert stamp_of(project)["level"] == "dev"
    assert "again" not in capsys.readouterr().out


@pytest.mark.parametrize(
    ("key", "value", "reason"),
    [
        ("state", "incomplete", "an earlier set up did not come to its end"),
        ("folder", "/elsewhere/.venv", "the folder was moved or copied"),
        ("python", "3.11.0b1", "it was made with Python 3.11.0b1"),
    ],
)
def test_a_venv_that_cannot_be_trusted_is_made_again(project, capsys, key, value, reason):
    setup_env.set_up(str(project), "test")
    stray = project / ".venv" / "stray"
    stray.write_text("of the earlier one")
    setup_env.write_stamp(str(project / ".venv"), {**stamp_of(project), key: value})
    capsys.readouterr()
    setup_env.set_up(str(project), "run")
    assert capsys.readouterr().out.startswith(f"Making .venv again: {reason}")
    assert not stray.exists()
    assert packages_in(project) == ["a"]
    assert stamp_of(project)["state"] == "complete"


def break_python_by_removing(python):
    python.unlink()


def break_python_by_another_version(python):
    python.unlink()
    python.write_text("#!/bin/sh\nexit 1\n")
    python.chmod(0o755)


def break_python_by_a_broken_file(python):
    python.unlink()
    python.write_bytes(b"\x7fELF and no more")
    python.chmod(0o755)


@pytest.mark.parametrize(
    "damage",
    [
        break_python_by_removing,
        break_python_by_another_version,
        break_python_by_a_broken_file,
    ],
)
def test_a_python_that_is_gone_or_broken_is_noticed(project, capsys, damage):
    setup_env.set_up(str(project), "run")
    damage(project / ".venv" / "bin" / "python")
    capsys.readouterr()
    setup_env.set_up(str(project), "run")
    assert "its Python is gone or broken" in capsys.readouterr().out
    assert setup_env.python_answers(str(project / ".venv/bin/python"), sys.version_info)


@pytest.mark.parametrize("text", ["", "{", "[]", '{"state": "complete"}'])
def test_an_unreadable_stamp_means_an_interrupted_set_up(project, text):
    setup_env.set_up(str(project), "run")
    (project / ".venv" / setup_env.STAMP).write_text(text)
    setup_env.set_up(str(project), "run")
    assert stamp_of(project)["state"] == "complete"


def test_a_venv_made_by_somebody_else_is_left_alone(project):
    (project / ".venv" / "bin").mkdir(parents=True)
    with pytest.raises(setup_env.SetUpError, match="Delete or rename it"):
        setup_env.set_up(str(project), "run")
    assert [path.name for path in (project / ".venv").iterdir()] == ["bin"]


def test_offline_before_anything_changed_keeps_what_was_installed(project):
    setup_env.set_up(str(project), "run")
    before = stamp_of(project)
    order_pip(project, "offline")
    with pytest.raises(setup_env.SetUpError) as caught:
        setup_env.set_up(str(project), "test")
    assert "no route to the index" in str(caught.value)
    assert "offline" in str(caught.value)
    assert stamp_of(project) == before
    setup_env.set_up(str(project), "run")
    assert len(pip_calls(project)) == 2


def test_offline_at_the_first_set_up_is_healed_by_the_next_call(project):
    order_pip(project, "offline")
    with pytest.raises(setup_env.SetUpError):
        setup_env.set_up(str(project), "run")
    assert stamp_of(project) == {"state": "incomplete"}
    order_pip(project, "")
    setup_env.set_up(str(project), "run")
    assert packages_in(project) == ["a"]


def test_packages_sent_elsewhere_by_the_configuration_are_missed(project):
    order_pip(project, "elsewhere")
    with pytest.raises(setup_env.SetUpError, match=r"not in \.venv: a\n.*PIP_TARGET"):
        setup_env.set_up(str(project), "run")
    assert stamp_of(project) == {"state": "incomplete"}


def start_set_up(project, level):
    """The set up in a process of its own, with the stand-in for pip."""
    code = (
        "import sys; sys.path[:0] = [sys.argv[1], sys.argv[2]]\n"
        "import setup_env, setup_packages\n"
        "from tests.unit.test_setup_env import make_stand_in_venv\n"
        "setup_packages.make_venv = make_stand_in_venv\n"
        "setup_env.set_up(sys.argv[3], sys.argv[4])\n"
    )
    return subprocess.Popen(
        [sys.executable, "-c", code, str(TOOLS), str(ROOT), str(project), level],
        stdout=subprocess.PIPE,
        text=True,
    )


def wait_for_number(path):
    give_up = time.monotonic() + 30
    while not (path.exists() and path.read_text()):
        assert time.monotonic() < give_up
        time.sleep(0.01)
    return int(path.read_text())


def test_a_killed_set_up_is_waited_for_and_then_made_again(project):
    """The pip of a killed set up lives on for a moment; nothing may start beside it."""
    order_pip(project, "hang")
    with start_set_up(project, "test") as killed:
        pip = wait_for_number(project / "pip-process")
        killed.kill()
    order_pip(project, "")
    with start_set_up(project, "test") as healing:
        first_line = healing.stdout.readline()
        assert first_line.startswith("Another set up is running")
        assert stamp_of(project) == {"state": "incomplete"}
        os.kill(pip, signal.SIGKILL)
        rest = healing.stdout.read()
    assert healing.returncode == 0
    assert rest.startswith("Making .venv again: an earlier set up did not come to its end.")
    assert packages_in(project) == ["a", "b"]
    assert stamp_of(project)["state"] == "complete"


def test_two_set_ups_at_once_install_once(project):
    with start_set_up(project, "run") as first, start_set_up(project, "run") as second:
        first.stdout.read()
        second.stdout.read()
    assert (first.returncode, second.returncode) == (0, 0)
    assert len(pip_calls(project)) == 1
    assert packages_in(project) == ["a"]


def test_an_old_python_is_told_what_to_do():
    with pytest.raises(setup_env.SetUpError) as caught:
        setup_env.require_python((3, 9, 18, "final", 0), "/usr/bin/python3")
    assert str(caught.value) == (
        "labplan needs Python 3.11 or newer; /usr/bin/python3 is 3.9.18.\n"
        "Install a newer one and name it, for example: make demo PYTHON=python3.12"
    )
    setup_env.require_python((3, 11, 0, "final", 0), "/usr/bin/python3")


@pytest.mark.parametrize("missing", ["venv", "ensurepip"])
def test_a_python_without_venv_is_told_which_package_to_install(missing):
    def find_spec(name):
        return None if name == missing else importlib.util.find_spec("json")

    with pytest.raises(setup_env.SetUpError, match=r"\n +sudo apt install python3\.12-venv\n"):
        setup_env.require_venv_modules(find_spec, (3, 12, 1))


def test_a_python_without_venv_changes_nothing(project, monkeypatch):
    setup_env.set_up(str(project), "run")
    setup_env.write_stamp(str(project / ".venv"), {**stamp_of(project), "python": "3.11.0b1"})
    before = stamp_of(project)
    monkeypatch.setattr("importlib.util.find_spec", lambda name: None)
    with pytest.raises(setup_env.SetUpError):
        setup_env.set_up(str(project), "run")
    assert stamp_of(project) == before
    assert packages_in(project) == ["a"]


def test_errors_of_the_file_system_say_where_and_end_with_2(project, monkeypatch, capsys):
    (project / "a file").write_text("")
    monkeypatch.setattr(setup_env, "ROOT", str(project / "a file"))
    assert setup_env.main(["run"]) == 2
    said = capsys.readouterr().err
    assert said.startswith("Set up stopped: Not a directory (")
    assert "make that folder writable" in said


@pytest.mark.parametrize("arguments", [[], ["everything"], ["run", "test"]])
def test_a_wrong_call_shows_the_right_one(arguments, capsys):
    assert setup_env.main(arguments) == 2
    assert "setup_env.py run|test|dev" in capsys.readouterr().err


@pytest.mark.parametrize("name", ["setup_env.py", "setup_packages.py"])
def test_the_set_up_can_be_read_by_an_old_python(name):
    import ast

    # Python 3.6 has no syntax tree version of its own here; 3.7 is the oldest that ast checks.
    ast.parse((TOOLS / name).read_text(encoding="utf-8"), feature_version=(3, 7))


def pins_of(name):
    """Lock file lines of one package each: name, version, marker and hashes."""
    return set((ROOT / name).read_text(encoding="utf-8").replace("\\\n", " ").splitlines())


def test_each_lock_file_contains_the_one_below():
    run, test, dev = (pins_of(name) for name in LOCK_NAMES)
    assert run
    assert run < test < dev
