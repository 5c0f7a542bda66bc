"""What all commands share: exit statuses, one message, no traceback."""

import sys
from importlib.metadata import version
from importlib.util import find_spec

import pytest

from hwpol.commands import VERBS, main
from hwpol.errors import ConfigError, HwpolError

NIGHT_VERBS = ["plan", "reduce", "standards"]


def test_bare_command_lists_every_verb(run):
    done = run()
    assert done.status == 0
    assert [verb for verb, (what, _) in VERBS.items() if verb not in done.out or what not in done.out] == []


@pytest.mark.parametrize("verb", [verb for verb in VERBS if find_spec(f"hwpol.commands.{verb}")])
def test_every_verb_has_help_with_an_example(run, verb):
    done = run(verb, "--help")
    assert done.status == 0
    assert f"example: {VERBS[verb][1]}" in done.out
    assert "--quiet" in done.out


def test_version(run):
    done = run("--version")
    assert (done.status, done.out) == (0, f"hwpol {version('hwpol')}\n")


@pytest.mark.parametrize("words", [["reduse"], ["reduse", "night.toml"], ["--nonsense"]])
def test_wrong_command(run, words):
    done = run(*words)
    assert done.status == 2
    assert words[0] != "reduse" or ("'reduse'" in done.err and "'reduce'" in done.err)


@pytest.mark.parametrize("verb", NIGHT_VERBS)
def test_missing_night_file(refused, tmp_path, verb):
    assert f"{tmp_path / 'none.toml'}: no such file" in refused(verb, tmp_path / "none.toml")


@pytest.mark.parametrize("verb", NIGHT_VERBS)
def test_unknown_key_names_file_key_and_nearest(refused, night_path, edit, verb):
    edit(night_path, "output =", 'ouput = "x"\noutput =')
    said = refused(verb, night_path)
    assert str(night_path) in said
    assert "ouput" in said
    assert "output" in said


@pytest.mark.parametrize("verb", NIGHT_VERBS)
def test_all_problems_of_a_night_file_are_told_at_once(refused, night_path, edit, verb):
    edit(night_path, "output =", "statistics = { level = 2.0 }\ngrouping = { gap = -1.0 }\noutput =")
    said = refused(verb, night_path)
    assert "statistics.level = 2" in said
    assert "grouping.gap = -1" in said


@pytest.mark.parametrize("verb", NIGHT_VERBS)
def test_no_frame_matches(refused, night_path, edit, verb):
    edit(night_path, "raw/*.fits", "raw/*.nothing")
    assert 'frames = "raw/*.nothing": matches no file' in refused(verb, night_path)


@pytest.mark.parametrize("verb", ["reduce", "standards", "demo", "simulate"])
def test_negative_jobs(refused, night_path, tmp_path, verb):
    where = {"demo": [tmp_path / "new"], "simulate": ["demo", tmp_path / "new"]}.get(verb, [night_path])
    assert "--jobs = -1" in refused(verb, *where, "--jobs", "-1")
    assert not (tmp_path / "new").exists()


def test_debug_shows_the_traceback(tmp_path):
    with pytest.raises(ConfigError, match="no such file"):
        main(["plan", str(tmp_path / "none.toml"), "--debug"])


def test_what_was_not_foreseen_is_told_without_a_traceback(run, night_path, monkeypatch):
    def fail(*_):
        raise ZeroDivisionError("by nothing")

    monkeypatch.setattr("hwpol.night.Night.read", fail)
    done = run("plan", night_path)
    assert done.status == 2
    assert "ZeroDivisionError: by nothing" in done.err
    assert "--debug" in done.err
    with pytest.raises(ZeroDivisionError):
        main(["plan", str(night_path), "--debug"])


@pytest.mark.parametrize(("raised", "word"), [(KeyboardInterrupt(), "stopped"), (HwpolError("a reason"), "a reason")])
def test_an_interrupted_run_says_so(run, night_path, monkeypatch, raised, word):
    def stop(*_):
        raise raised

    monkeypatch.setattr("hwpol.night.Night.read", stop)
    done = run("reduce", night_path)
    assert (done.status, done.out) == (2, "")
    assert word in done.err


def test_console_script_names_main():
    from importlib.metadata import entry_points

    (script,) = entry_points(group="console_scripts", name="hwpol")
    assert script.load() is main


def test_arguments_come_from_the_command_line(run, monkeypatch, capsys):
    monkeypatch.setattr(sys, "argv", ["hwpol", "explain", "p_debiased"])
    assert main() == 0
    assert "p with its noise bias removed" in capsys.readouterr().out
