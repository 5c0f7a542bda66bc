"""`hwpol measure`: one sequence, one source, on screen."""

import pytest

ARGUMENTS = ["--at", "48", "24"]


@pytest.fixture
def measure(tiny_night, visit_frames):
    return ["measure", *visit_frames("Fern"), "--instrument", tiny_night.instrument_path]


def shown(text, name):
    """The number that a line of the screen gives for a name."""
    return float(next(line.split()[1] for line in text.splitlines() if line.split()[:1] == [name]))


def test_equals_the_night(run, measure, reduced_night):
    path, answer = reduced_night
    done = run(*measure, *ARGUMENTS, "--calibration", path.parent / "reduced" / "calibration.toml")
    assert done.status == 0
    row = answer.results[answer.results["target"] == "Fern"][0]
    # Half a unit of the last digit shown, in percent; the place of the source was given to a pixel or two.
    assert shown(done.out, "q") == pytest.approx(100 * row["q"], abs=0.0051)
    assert shown(done.out, "u") == pytest.approx(100 * row["u"], abs=0.0051)
    assert "on the sky" in done.out


def test_without_calibration_is_in_the_instrument_frame(run, measure, reduced_night):
    done = run(*measure, *ARGUMENTS)
    assert done.status == 0
    assert "in the instrument frame, uncalibrated" in done.out
    row = reduced_night[1].results[reduced_night[1].results["target"] == "Fern"][0]
    assert shown(done.out, "q") == pytest.approx(100 * row["q_inst"], abs=0.0051)


def test_frame_set_aside_makes_status_1(run, measure, tmp_path):
    broken = tmp_path / "broken.fits"
    broken.write_text("this is no image\n")
    done = run(measure[0], broken, *measure[1:], *ARGUMENTS)
    assert done.status == 1
    assert "not used: broken.fits" in done.out


@pytest.mark.parametrize(
    ("extra", "word"),
    [
        (["--radius", "wide"], "radius = 'wide'"),
        (["--radius", "-2"], "radius = '-2'"),
        (["--annulus", "9", "3"], "annulus = (9.0, 3.0)"),
        (["--annulus", "best", "9"], "annulus = 'best'"),
        (["--method", "guess"], "method = 'guess'"),
        (["--calibration", "none.toml"], "none.toml"),
        (["--at", "nan", "3"], "positions"),
    ],
)
def test_bad_option(refused, measure, extra, word):
    assert word in refused(*measure, *ARGUMENTS, *extra)


def test_missing_instrument_file(refused, tiny_night, tmp_path):
    assert "none.toml: no such file" in refused(
        "measure", tiny_night.paths[9], "--instrument", tmp_path / "none.toml", *ARGUMENTS
    )


def test_frame_that_is_not_there(refused, tiny_night, tmp_path):
    said = refused("measure", tmp_path / "none.fits", "--instrument", tiny_night.instrument_path, *ARGUMENTS)
    assert "none.fits" in said


def test_frames_of_several_targets(refused, tiny_night):
    said = refused("measure", *tiny_night.paths, "--instrument", tiny_night.instrument_path, *ARGUMENTS)
    assert "3 visits (Dew in V; Moss in V; Fern in V)" in said
