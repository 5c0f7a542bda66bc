"""Where artificial frames may be written, and the night file that reduces them as the night was."""

from __future__ import annotations

import glob
import itertools
import json
import os
import warnings
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from hwpol.errors import ConfigError, HwpolWarning, InputError
from hwpol.frames import Calibrator, FrameSet
from hwpol.night import Night
from hwpol.night.config import NightConfig, frame_paths
from hwpol.night.config_objects import Extent, TargetConfig


@dataclass(frozen=True)
class InjectedNight(Night):
    """A night of altered copies; its masters are those of the night itself, kept in `masters`."""

    masters: Path

    def calibrator(self, frames: FrameSet) -> Calibrator:
        """The detector stage with the night's own masters."""
        return replace(super().calibrator(frames), cache=self.masters)


def check_folder(folder: Path, config: NightConfig) -> None:
    """Refuse a folder where altered copies would lie among raw frames, or be taken for some.

    Raises
    ------
    ConfigError
        The folder is a file, holds input frames at any depth, lies below a folder that holds some or that a pattern
        of the night file searches; below the night's output folder, which is never searched, it may lie anywhere.
    """
    real = Path(os.path.realpath(folder))
    remedy = f"expected a folder of its own, such as {config.output / 'inject'}"
    if folder.exists() and not folder.is_dir():
        raise ConfigError(f"--output = {folder}: is a file; {remedy}")
    sheltered = Path(os.path.realpath(config.output)) in (real, *real.parents)
    with warnings.catch_warnings():
        # The reduction says it again.
        warnings.simplefilter("ignore", HwpolWarning)
        paths = frame_paths(config)
    for path in paths:
        for home in {path.parent, Path(os.path.realpath(path)).parent}:
            home = Path(os.path.realpath(home))
            if real in (home, *home.parents) or (home in real.parents and not sheltered):
                raise ConfigError(f"--output = {folder}: artificial stars never go among raw frames ({path}); {remedy}")
    for pattern in config.frames:
        if "**" in pattern and not sheltered:
            parts = Path(os.path.expanduser(pattern)).parts
            plain = itertools.takewhile(lambda part: not glob.has_magic(part), parts)
            root = Path(os.path.realpath(config.folder.joinpath(*plain)))
            if root in (real, *real.parents):
                raise ConfigError(
                    f"--output = {folder}: the pattern {pattern!r} of the night file would take artificial frames for "
                    f"raw ones; {remedy}"
                )


def check_new(paths: Iterable[Path]) -> None:
    """Refuse to write over kept frames of an earlier run."""
    for path in paths:
        if path.exists():
            raise InputError(f"{path}: exists already; remove it, or give another folder with --output")


def night_text(
    config: NightConfig, calibrations: Sequence[str], targets: Sequence[TargetConfig], calibration: str
) -> str:
    """The night file (TOML) of the altered copies in its folder ``raw``, with the settings of the night.

    Parameters
    ----------
    calibrations : sequence of str
        Bias, dark and flat frames, where they are.
    targets : sequence of TargetConfig
    calibration : str
        Name of the calibration file beside the night file, or "off".
    """
    frames = ["raw/*.fits", *(glob.escape(name) for name in calibrations)]
    photometry, statistics = config.photometry, config.statistics
    lines = [
        "# Artificial stars in copies of a night's frames. No frame of this folder is an observation.",
        f"instrument = {_text(str(config.instrument_path))}",
        f"frames = [{', '.join(map(_text, frames))}]",
        'output = "reduced"',
        f"\n[grouping]\ngap = {config.grouping.gap!r}",
        f"\n[detector]\nflat = {_text(config.detector.flat)}\ncosmic_rays = {_text(config.detector.cosmic_rays)}",
        f"\n[registration]\nmethod = {_text(config.registration.method)}",
        f"\n[photometry]\nradius = {_extent(photometry.radius)}\nannulus = [{_extent(photometry.annulus[0])}, "
        f'{_extent(photometry.annulus[1])}]\nsources = "target"',
        f"\n[demodulation]\nmethod = {_text(config.demodulation.method)}\ngain = {_text(config.demodulation.gain)}\n"
        f"circular = {str(config.demodulation.circular).lower()}",
        f"\n[correction]\ncalibration = {_text(calibration)}",
        f"\n[statistics]\nestimator = {_text(statistics.estimator)}\nlevel = {statistics.level!r}",
        "\n[products]\nreport = false",
    ]
    for target in targets:
        assert target.xy is not None
        lines.append(
            f"\n[[target]]\nname = {_text(target.name)}\nobject = {_text(target.object or '')}\n"
            f'role = "science"\nxy = [{float(target.xy[0])!r}, {float(target.xy[1])!r}]\n'
            f"moving = {str(target.moving).lower()}"
        )
    return "\n".join(lines) + "\n"


def _text(value: str) -> str:
    return json.dumps(value, ensure_ascii=False)


def _extent(extent: Extent) -> str:
    return repr(extent.value) if extent.unit == "pixel" else _text(str(extent))
