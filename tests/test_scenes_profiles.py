"""Sensor profiles: shipped ones, a user's own, and every way to get one wrong."""

from __future__ import annotations

import numpy as np
import pytest

from inundate.common.codes import BAND_ROLES, ViewCode
from inundate.common.errors import InputError
from inundate.scenes import SHIPPED_PROFILES, MaskRule, MaskRules, load_profile
from inundate.scenes.sensors import baseline_key, parse_profile

OWN = """
name = "own"
step_m = 5.0
[scaling]
scale = 0.001
fill = -1
valid = [0, 2000]
[bands.red]
assets = ["R"]
[bands.nir]
band_names = ["N"]
required = false
scale = 0.002
[mask]
assets = ["clouds"]
otherwise = "clear"
[[mask.rules]]
code = "cloud"
bits = [8, 9]
at_least = 2
[[mask.rules]]
code = "shadow"
bit = 4
"""


@pytest.mark.parametrize("name", SHIPPED_PROFILES)
def test_shipped_profiles_load(name):
    profile = load_profile(name)
    assert profile.name == name
    assert {"blue", "green", "red", "nir"} <= set(profile.roles)
    assert profile.roles == tuple(role for role in BAND_ROLES if role in profile.bands)
    assert set(np.unique(profile.mask.rules.table())) <= {int(code) for code in ViewCode}


def test_own_profile(tmp_path):
    path = tmp_path / "own.toml"
    path.write_text(OWN)
    profile = load_profile(path)
    assert (profile.name, profile.step_m, profile.roles) == ("own", 5.0, ("red", "nir"))
    assert profile.scaling.valid == (0.0, 2000.0)
    assert profile.bands["nir"].scale == 0.002
    assert not profile.bands["nir"].required
    got = profile.mask.rules.decode(np.array([0, 256, 512, 768, 16, 512 + 16], np.uint16))
    assert got.tolist() == [0, 0, 1, 1, 2, 1]  # the first rule that holds decides


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('name = "own"', 'name = "own"\ncolour = 1', "unknown key 'colour'; valid keys are name, step_m"),
        ("fill = -1", "filling = -1", "unknown key 'filling'; valid keys are scale, offset, fill"),
        ("[bands.nir]", "[bands.infrared]", "must be a band role, one of blue, green"),
        ("step_m = 5.0", "step_m = 0", "step_m = 0: must be a finite number above 0"),
        ("scale = 0.001", "", "key 'scale' is missing"),
        ("valid = [0, 2000]", "valid = [5, 2]", "must be two numbers, least and greatest"),
        ("valid = [0, 2000]", "valid = 7", "must be two numbers, least and greatest"),
        ('code = "cloud"', 'code = "clouds"', "must be one of clear, cloud, shadow, snow_ice, fill"),
        ("bits = [8, 9]", "bits = [8, 10]", "must be neighbouring bits"),
        ("at_least = 2", "at_least = 4", "must be a whole number from 1 to 3"),
        ("bit = 4", "bit = 16", "must be a whole number from 0 to 15"),
        ("bit = 4", "bit = 4\nvalues = [1]", "must have exactly one of values, bit, bits"),
        ('assets = ["R"]', "assets = [1]", "must be a list of texts"),
        ('assets = ["R"]', "required = true", "must give assets, common_names or band_names"),
        ("[scaling]", "[scaling", "not valid TOML"),
    ],
)
def test_bad_profiles_say_what_is_wrong(old, new, message):
    assert old in OWN
    with pytest.raises(InputError, match=message.replace("[", r"\[").replace("(", r"\(")):
        parse_profile(OWN.replace(old, new, 1), "own.toml")


def test_unknown_profile_names_the_shipped_ones():
    with pytest.raises(InputError, match="neither a file nor a shipped profile; use one of sentinel-2-l2a"):
        load_profile("sentinel-9")


def test_baselines_compare_as_numbers():
    assert baseline_key("N0400") == baseline_key("04.00") == baseline_key("4.0") == (4, 0)
    assert baseline_key("10.00") > baseline_key("9.99")
    with pytest.raises(InputError, match="processing baseline 'new'"):
        baseline_key("new")


def test_mask_of_odd_types():
    rules = MaskRules((MaskRule(ViewCode.CLEAR, values=(1,)),), ViewCode.CLOUD)
    assert rules.decode(np.array([1.0, np.nan, -1.0, 70000.0, 2.0])).tolist() == [0, 255, 255, 255, 1]
    assert rules.decode(np.array([[1, -5]], np.int16)).tolist() == [[0, 255]]
