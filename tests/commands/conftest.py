from dataclasses import dataclass

import pytest

from hwpol.commands import main


@dataclass(frozen=True)
class Done:
    """What a command returned and printed."""

    status: int
    out: str
    err: str


@pytest.fixture
def run(capsys):
    """Run a command as the console script does; whatever happens, no traceback may reach the screen."""

    def call(*words):
        capsys.readouterr()
        try:
            status = main([str(word) for word in words])
        except SystemExit as end:
            status = end.code
        said = capsys.readouterr()
        assert "Traceback" not in said.out + said.err
        return Done(status, said.out, said.err)

    return call


@pytest.fixture
def refused(run):
    """Run a command that cannot run: status 2, nothing on stdout, one message; return the message."""

    def call(*words):
        done = run(*words)
        assert done.status == 2
        assert done.out == ""
        lines = [line for line in done.err.splitlines() if line.startswith("hwpol")]
        assert len(lines) == 1, done.err
        assert "not foreseen" not in done.err
        return done.err

    return call


@pytest.fixture
def visit_frames(tiny_night):
    """A function that gives the paths of a target's frames, with those that calibrate the detector."""

    def paths(target):
        rows = tiny_night.frames[[row["object"] == target or row["kind"] != "science" for row in tiny_night.frames]]
        return [tiny_night.night_path.parent / "raw" / str(name) for name in rows["file"]]

    return paths
