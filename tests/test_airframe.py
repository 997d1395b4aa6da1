"""The airframe file: what is read, what is derived, and every mistake named with its line."""

from pathlib import Path

import pytest

from framegrade.airframe import Airframe, load_airframe
from framegrade.settings_file import SettingsError

WHOLE = """[airframe]
motors = 4
blades = 3
kv_rpm_per_volt = 1000
cells = 4
magnet_poles = 14
idle_rpm = 1500
hover_rpm = 7000
full_rpm = 13000

[mount]
gimbal = true
resonance_hz = 31.5
camera_mass_g = 250
isolator_sag_mm = 25.0
isolator_damping_ratio = 0.2

[[resonance]]
part = "arm"
frequency_hz = 44
"""


def written(tmp_path, text):
    path = tmp_path / "airframe.toml"
    path.write_text(text, encoding="utf-8")
    return path


def without(*keys):
    return "".join(line + "\n" for line in WHOLE.splitlines() if line.split(" =")[0] not in keys)


def test_all_values(tmp_path):
    made = load_airframe(written(tmp_path, WHOLE))
    assert (made.motors, made.blades, made.pole_pairs) == (4, 3, 7)
    assert (made.idle_rpm, made.hover_rpm, made.full_rpm) == (1500, 7000, 13000)
    assert made.mount.gimbal and made.mount.resonance_hz == 31.5 and made.mount.camera_mass_g == 250
    assert made.mount.isolator_damping_ratio == 0.2 and made.mount.damping_given
    assert made.resonances[0].part == "arm" and made.resonances[0].frequency_hz == 44


def test_no_load_limit(tmp_path):
    """Speed constant x volts is the no-load limit (common practice); a full lithium-polymer cell has 4.2 V."""
    made = load_airframe(written(tmp_path, WHOLE))
    assert made.volts == pytest.approx(16.8)
    assert made.no_load_rpm == pytest.approx(16_800)
    given = load_airframe(written(tmp_path, WHOLE.replace("cells = 4", "volts = 14.6")))
    assert given.no_load_rpm == pytest.approx(14_600)


def test_nominal_voltage_is_doubted(tmp_path):
    """Packs are sold by 3.7 V a cell and charge to 4.2 V (common practice): 14.8 V is most likely four cells."""
    doubt = load_airframe(written(tmp_path, WHOLE.replace("cells = 4", "volts = 14.8"))).doubt
    assert "4 lithium-polymer cells" in doubt and "16.8 V" in doubt and "cells = 4" in doubt
    for text in (WHOLE, WHOLE.replace("cells = 4", "volts = 14.6"), WHOLE.replace("cells = 4", "volts = 25.2")):
        assert load_airframe(written(tmp_path, text)).doubt is None


def test_isolator_frequency(tmp_path):
    """25.0 mm of sag gives 3.15 Hz (ASHRAE Applications, ISO 2017-1); 0.1 N/mm under 250 g is 3.183 Hz by hand."""
    assert load_airframe(written(tmp_path, WHOLE)).mount.isolator_hz == pytest.approx(3.15, abs=0.005)
    text = WHOLE.replace("isolator_sag_mm = 25.0", "isolator_stiffness_n_per_mm = 0.1")
    assert load_airframe(written(tmp_path, text)).mount.isolator_hz == pytest.approx(20 / 6.2831853, rel=1e-6)


def test_reach_given(tmp_path):
    reach = load_airframe(written(tmp_path, WHOLE)).reach
    assert (reach.lowest_rpm, reach.highest_rpm, reach.loaded_rpm) == (1500, 13000, 13000)
    assert reach.holds(1500) and reach.holds(13000) and not reach.holds(1499) and not reach.holds(13001)
    assert reach.words() == "1500 rpm (idle speed) to 13000 rpm (full speed)"


def test_reach_from_common_practice(tmp_path):
    """Without full speed the no-load limit bounds it, and load costs 15 to 25 % (common practice)."""
    reach = load_airframe(written(tmp_path, without("idle_rpm", "full_rpm"))).reach
    assert reach.highest_rpm == pytest.approx(16_800) and reach.loaded_rpm == pytest.approx(14_280)
    assert reach.lowest_rpm == pytest.approx(840)
    assert "1000 rpm/V x 16.8 V" in reach.highest_words


def test_least_file(tmp_path):
    made = load_airframe(written(tmp_path, "[airframe]\nmotors = 1\nblades = 2\nkv_rpm_per_volt = 700\nvolts = 12\n"))
    assert made == Airframe(motors=1, blades=2, kv_rpm_per_volt=700.0, volts=12.0)
    assert made.pole_pairs is None and made.mount.isolator_hz is None and not made.mount.damping_given


@pytest.mark.parametrize("text, line, words", [
    (without("motors"), 1, '"motors" is missing'),
    (WHOLE.replace("blades = 3", "blades = 0"), 3, "from 1 to 12"),
    (WHOLE.replace("blades = 3", "blades = 2.5"), 3, "a whole number"),
    (WHOLE.replace("kv_rpm_per_volt = 1000", "kv = 1000"), 4, 'unknown key "kv"'),
    (without("cells"), 1, 'give "cells" or "volts"'),
    (WHOLE.replace("cells = 4", "cells = 4\nvolts = 16.8"), 6, "both given"),
    (WHOLE.replace("magnet_poles = 14", "magnet_poles = 13"), 6, "odd"),
    (WHOLE.replace("full_rpm = 13000", "full_rpm = 17000"), 9, "1000 rpm/V x 16.8 V = 16800 rpm"),
    (WHOLE.replace("hover_rpm = 7000", "hover_rpm = 1200"), 8, 'faster than "idle_rpm" = 1500'),
    (WHOLE.replace("full_rpm = 13000", "full_rpm = 6000"), 9, 'faster than "hover_rpm" = 7000'),
    (without("idle_rpm").replace("hover_rpm = 7000", "hover_rpm = 700"), 7, 'give "idle_rpm" as well'),
    (WHOLE.replace("isolator_damping", "isolator_stiffness_n_per_mm = 1\nisolator_damping"), 16, "keep the one"),
    (WHOLE.replace("isolator_sag_mm = 25.0", "isolator_stiffness_n_per_mm = 1").replace("camera_mass_g = 250\n", ""),
     14, 'needs "camera_mass_g"'),
    (without("isolator_sag_mm"), 15, 'needs "isolator_sag_mm"'),
    (WHOLE.replace('part = "arm"\n', ""), 18, '"part" is missing'),
    (WHOLE.replace("[mount]", "[camera]"), 11, 'unknown table "camera"'),
    (WHOLE.replace("blades = 3", "blades = "), 3, "not valid TOML"),
])
def test_mistakes(tmp_path, text, line, words):
    path = written(tmp_path, text)
    with pytest.raises(SettingsError) as caught:
        load_airframe(path)
    assert str(caught.value).startswith(f"{path}, line {line}: ")
    assert words in str(caught.value) and "\n" not in str(caught.value)


def test_no_file(tmp_path):
    with pytest.raises(SettingsError, match="no such file"):
        load_airframe(tmp_path / "none.toml")


def test_fixture():
    """The sample that documentation points at is a good file."""
    made = load_airframe(Path(__file__).parent.parent / "fixtures" / "airframe.toml")
    assert made.motors == 4 and made.reach.holds(made.hover_rpm)
