"""Settings from file and options: precedence, source, and what is said of wrong ones."""

from __future__ import annotations

import json
import re

import pytest

from glidefit.settings import declarations


def run(desk, *options):
    return desk.glidefit("run", desk.two_conditions(), *options)


def refused(desk, *options):
    said = run(desk, *options)
    assert (said.code, said.out) == (3, "")
    assert not (desk.folder / "reports").exists()
    return said.err


def test_option_wins_over_file_and_file_over_default(desk):
    text = "[link]\nmax_speed = 8\n[interval]\nlevel = 0.9\n"
    desk.write("mine.toml", text)
    said = run(desk, "--settings", "mine.toml", "--interval-level", "0.8", "--clean-drift", "off")
    assert said.code == 0
    results = json.loads((desk.folder / "reports/assay/results.json").read_text(encoding="utf-8"))
    rows = {row["key"]: (row["value"], row["source"]) for row in results["settings"]}
    assert rows.keys() == {d.key for d in declarations()}
    assert rows["link.max_speed"] == ("8.0", "file")
    assert rows["interval.level"] == ("0.8", "option")
    assert rows["clean.drift"] == ("off", "option")
    assert rows["link.max_gap"] == ("2", "default")
    levels = {e["level"] for c in results["conditions"] for e in c["estimates"].values()}
    assert levels == {0.8}
    page = (desk.folder / "reports/assay/conditions/mutant.html").read_text(encoding="utf-8")
    cells = [re.findall(r"<t[hd][^>]*>(.*?)</t[hd]>", row) for row in page.split("<tr>")]
    shown = {row[0]: row[1:] for row in cells if row}
    for key, words in {
        "link.max_speed": {"8.0", "file"},
        "interval.level": {"0.8", "option"},
        "link.max_gap": {"2", "default"},
    }.items():
        text = " ".join(next(row for name, row in shown.items() if key in name))
        assert words <= set(re.findall(r"[\w.]+", text)), f"{key}: {text}"


def test_unknown_setting_names_the_nearest(desk):
    desk.write("mine.toml", "[link]\nmax_sped = 3\n")
    assert refused(desk, "--settings", "mine.toml") == (
        "Error: mine.toml: 'link.max_sped' is no setting; expected a known setting. Did you mean "
        "'link.max_speed'?\n"
    )


def test_unknown_section_names_the_nearest(desk):
    desk.write("mine.toml", "[lnk]\nmax_speed = 3\n")
    assert refused(desk, "--settings", "mine.toml") == (
        "Error: mine.toml: 'lnk' is no setting; expected a known setting. Did you mean 'link'?\n"
    )


def test_setting_out_of_limits_as_option(desk):
    assert refused(desk, "--link-max-speed", "-1") == (
        "Error: option --link-max-speed: the value is -1.0; expected a value greater than 0 "
        "(µm/s). The default is 12.0.\n"
    )


def test_settings_out_of_limits_in_a_file_are_listed_at_once(desk):
    desk.write("mine.toml", "[link]\nmax_speed = -1\nmax_gap = 1.5\n[clean]\ndrift = 'no'\n")
    assert refused(desk, "--settings", "mine.toml") == (
        "3 errors:\n"
        "- mine.toml, link.max_speed: the value is -1; expected a value greater than 0 (µm/s). The "
        "default is 12.0.\n"
        "- mine.toml, link.max_gap: the value is 1.5; expected a whole number (frames). The "
        "default is 2.\n"
        "- mine.toml, clean.drift: the value is 'no'; expected auto or off. The default is auto.\n"
    )


@pytest.mark.parametrize("value", ["nan", "inf"])
def test_setting_that_is_not_finite(desk, value):
    assert refused(desk, "--link-max-speed", value) == (
        f"Error: option --link-max-speed: the value is {value}; expected a finite number (µm/s). "
        "The default is 12.0.\n"
    )


def test_settings_file_that_is_not_there(desk):
    desk.write("mine.toml", "")
    assert refused(desk, "--settings", "mein.toml") == (
        f"Error: mein.toml: there is no such file in {desk.folder}; expected a settings file in "
        "TOML. Did you mean 'mine.toml'?\n"
    )


@pytest.mark.parametrize(
    ("option", "value", "told"),
    [
        ("--link-max-speed", "fast", "'fast' is not a valid number."),
        ("--link-max-speed", "8,5", "'8,5' is not a valid number."),
        ("--link-max-gap", "1.5", "'1.5' is not a valid whole number."),
        ("--clean-drift", "on", "'on' is not one of 'auto', 'off'."),
        ("--workers", "0", "0 is not in the range x>=1."),
        ("--seed", "-1", "-1 is not in the range x>=0."),
    ],
)
def test_value_of_the_wrong_kind_is_wrong_usage(desk, option, value, told):
    said = run(desk, option, value)
    assert (said.code, said.out) == (2, "")
    assert said.err == (
        "Usage: glidefit run [OPTIONS] SHEET...\nTry 'glidefit run --help' for help.\n\n"
        f"Error: Invalid value for '{option}': {told}\n"
    )
