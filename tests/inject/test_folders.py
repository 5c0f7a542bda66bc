"""Where artificial frames may go, and the night file that reduces them."""

import glob
from dataclasses import replace

import pytest

from hwpol.errors import ConfigError, InputError
from hwpol.inject.folders import check_folder, check_new, night_text
from hwpol.night.config import read_night
from hwpol.night.config_objects import (
    DemodulationConfig,
    DetectorConfig,
    Extent,
    GroupingConfig,
    PhotometryConfig,
    RegistrationConfig,
    StatisticsConfig,
    TargetConfig,
)


@pytest.fixture
def config(night_path):
    """The night file of a night that may be spoilt."""
    return read_night(night_path)


def test_folders_that_are_safe(config):
    for name in ("reduced/inject", "inject", "reduced"):
        check_folder(config.folder / name, config)


@pytest.mark.parametrize("name", ["raw", "raw/deep/er", ".", "..", "raw/../raw"])
def test_folders_among_raw_frames(config, name):
    with pytest.raises(ConfigError, match="raw frames"):
        check_folder(config.folder / name, config)


def test_links_lead_nowhere_else(config, tmp_path):
    (tmp_path / "link").symlink_to(config.folder / "raw")
    with pytest.raises(ConfigError, match="raw frames"):
        check_folder(tmp_path / "link" / "inject", config)


def test_frames_that_are_links_shelter_their_home_too(config, tmp_path):
    frame = next((config.folder / "raw").glob("*.fits"))
    archive = tmp_path / "archive"
    archive.mkdir()
    frame.rename(archive / frame.name)
    frame.symlink_to(archive / frame.name)
    with pytest.raises(ConfigError, match="raw frames"):
        check_folder(archive / "inject", config)


def test_patterns_that_search_deep(config):
    deep = replace(config, frames=("**/*.fits",))
    with pytest.raises(ConfigError, match=r"\*\*"):
        check_folder(config.folder / "proof", deep)
    check_folder(config.output / "inject", deep)


def test_frames_beside_the_night_file_leave_the_output_free(config):
    for frame in (config.folder / "raw").glob("*.fits"):
        frame.rename(config.folder / frame.name)
    beside = replace(config, frames=("*.fits",))
    check_folder(config.output / "inject", beside)
    with pytest.raises(ConfigError, match="raw frames"):
        check_folder(config.folder / "inject", beside)


def test_a_file_is_no_folder(config):
    with pytest.raises(ConfigError, match="is a file"):
        check_folder(config.folder / "night.toml", config)


def test_kept_frames_are_not_written_over(tmp_path):
    check_new([tmp_path / "new"])
    with pytest.raises(InputError, match="exists already"):
        check_new([tmp_path])


def test_night_file_reads_back_as_the_night_was(config):
    config = replace(
        config,
        grouping=GroupingConfig(17.5),
        detector=DetectorConfig("per-angle", "off"),
        registration=RegistrationConfig("correlation"),
        photometry=PhotometryConfig(Extent(2.25, "fwhm"), (Extent(11.5), Extent(6.0, "fwhm")), "field"),
        demodulation=DemodulationConfig("double-ratio", "cycle", True),
        statistics=StatisticsConfig("mode", 0.9),
    )
    targets = [
        TargetConfig("Fern", object='F "x" [1]', role="science", xy=(1.25, 30.125), moving=True),
        TargetConfig("artificial 1", object='F "x" [1]', role="science", xy=(0.1 + 0.2, 5.0)),
    ]
    odd = config.folder / "flat [1] é.fits"
    odd.write_bytes(b"")
    path = config.folder / "copy.toml"
    path.write_text(night_text(config, [str(odd)], targets, "off"), encoding="utf-8")
    again = read_night(path)
    for part in ("instrument", "grouping", "detector", "registration", "demodulation", "statistics"):
        assert getattr(again, part) == getattr(config, part)
    assert again.photometry == replace(config.photometry, sources="target")
    assert list(again.targets) == targets
    assert again.correction.calibration == "off"
    assert glob.glob(again.frames[1]) == [str(odd)]


def test_best_radius_stays_best(config):
    path = config.folder / "copy.toml"
    path.write_text(night_text(config, [], [TargetConfig("a", object="a", xy=(1.0, 2.0))], "off"), encoding="utf-8")
    assert read_night(path).photometry.radius == config.photometry.radius == Extent(0.0, "best")
