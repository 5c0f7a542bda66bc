"""Completion scripts name every command and option, and the shell takes them."""

import shutil
import subprocess

import pytest

from hwpol.commands import VERBS, main
from hwpol.commands.completion import SHELLS, completion


@pytest.mark.parametrize("shell", SHELLS)
def test_every_command_and_its_options_are_named(shell):
    script = completion(shell)
    for verb in VERBS:
        assert verb in script
    assert "jobs" in script


def test_bash_completes(tmp_path):
    # Continuous integration is a bash script: where there is none, this must fail and not pass by.
    bash = shutil.which("bash")
    assert bash is not None
    (tmp_path / "hwpol.sh").write_text(completion("bash"), encoding="utf-8")
    test = "source hwpol.sh; COMP_WORDS=(hwpol red); COMP_CWORD=1; _hwpol; echo ${COMPREPLY[@]}; " \
        "COMP_WORDS=(hwpol reduce --fr); COMP_CWORD=2; _hwpol; echo ${COMPREPLY[@]}"  # fmt: skip
    done = subprocess.run([bash, "-c", test], cwd=tmp_path, capture_output=True, text=True, check=True)
    assert done.stdout.split() == ["reduce", "--fresh"]


def test_an_unknown_shell_is_refused(capsys):
    with pytest.raises(SystemExit) as stop:
        main(["--completion", "csh"])
    assert stop.value.code == 2
    assert "bash, zsh, fish" in capsys.readouterr().err
