"""What a scenario file may say, and what is said of what it may not."""

import pytest

from hwpol.errors import ConfigError
from hwpol.simulate import Scenario, known_keys, shipped_scenarios


@pytest.mark.parametrize("name", sorted(shipped_scenarios()))
def test_shipped_scenarios_are_sound(name):
    scenario = Scenario.read(shipped_scenarios()[name])
    assert scenario.name == name
    roles = [target.role for target in scenario.targets]
    assert {"science", "polarised", "zero-polarised"} <= set(roles)


def test_every_key_is_explained():
    keys = known_keys()
    assert {"atmosphere.seeing", "target.companion.rate", "filters.*.ip", "fault.kind"} <= set(keys)
    assert all(info.help and info.expected for info in keys.values())


def test_all_problems_at_once(small):
    small["seeed"] = 4
    small["array"]["shape"] = [80]
    small["instrument"]["detector"]["gain"] = -1
    small["target"][0]["p"] = 1.5
    with pytest.raises(ConfigError) as caught:
        Scenario.from_dict(small, source="x.toml")
    text = str(caught.value)
    for part in ("seeed", '"seed"', "array.shape", "instrument.detector.gain = -1", "target[1].p = 1.5", "x.toml"):
        assert part in text
    assert len(caught.value.problems) == 4


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda t: t["block"][1].update(targets=["Ferm"]), "block[2].targets"),
        (lambda t: t["block"][1].update(filters=["R"]), "block[2].filters"),
        (lambda t: t["block"][1].update(angles=[]), "block[2].angles"),
        (lambda t: t["block"][1].pop("exposure"), "block[2].exposure"),
        (lambda t: t.update(beam=[{}, {}, {}]), "beam: 3 tables"),
        (lambda t: t["target"].append(dict(t["target"][0])), "stands twice"),
        (lambda t: t["target"][0].update(q=0.1), "either q and u, or p and theta"),
        (lambda t: t["instrument"]["detector"].pop("pixel_scale"), "pixel_scale"),
        (lambda t: t.update(headers={"format": {"plate": "{}"}}), "headers.format.plate"),
        (lambda t: (t["instrument"].pop("site"), t["filters"]["V"].update(ip_tel=[0.01, 0])), "instrument.site"),
        (lambda t: t.update(start="yesterday"), "start"),
        (lambda t: t.update(fault=[{"kind": "hit", "frames": [1], "beam": 2, "amount": 9.0}]), "fault[1]: a hit"),
        (lambda t: t.update(fault=[{"kind": "cloud", "frames": [1], "amount": 2.0}]), "fault[1].amount = 2"),
        (lambda t: t.update(instrument="absent.toml"), "absent.toml"),
    ],
)
def test_contradictions_are_named(small, change, words):
    change(small)
    with pytest.raises(ConfigError) as caught:
        Scenario.from_dict(small)
    assert words in str(caught.value)


def test_polarisation_per_filter_and_by_angle(small):
    small["filters"]["R"] = {}
    small["target"][0].update(p={"V": 0.1, "R": 0.2}, theta=45.0)
    target = Scenario.from_dict(small).targets[0]
    assert target.stokes("V") == pytest.approx((0, 0.1, 0), abs=1e-15)
    assert target.stokes("R") == pytest.approx((0, 0.2, 0), abs=1e-15)


def test_an_instrument_file_beside_the_scenario(small, tmp_path):
    from hwpol.simulate.files import toml_text

    (tmp_path / "own.toml").write_text(toml_text(small["instrument"]))
    expected = Scenario.from_dict(small).instrument
    small["instrument"] = "own.toml"
    (tmp_path / "scenario.toml").write_text(toml_text(small))
    assert Scenario.read(tmp_path / "scenario.toml").instrument == expected
