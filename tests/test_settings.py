"""Settings: declared once, limited, and every value knows where it comes from."""

import math
import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from glidefit.errors import InputErrors
from glidefit.settings import LinkSettings, Settings, declarations, resolve

DECLARED = {declared.key: declared for declared in declarations()}


def problems(**given):
    with pytest.raises(InputErrors) as caught:
        resolve(file_name="s.toml", **given)
    return str(caught.value).splitlines()


def fields():
    """Section, name and pydantic's field of every setting, by another way than declarations."""
    for section in Settings.model_fields:
        kind = type(getattr(Settings(), section))
        for name, field in kind.model_fields.items():
            yield section, name, field


def test_every_setting_is_declared_in_order_under_its_key():
    assert list(DECLARED) == [f"{section}.{name}" for section, name, _ in fields()]


@pytest.mark.parametrize("declared", list(DECLARED.values()), ids=lambda declared: declared.key)
def test_a_declaration_has_all_that_an_option_needs(declared):
    assert declared.kind in (float, int, str)
    assert declared.help[0].isupper()
    assert declared.help.endswith(".")
    assert declared.default == getattr(getattr(Settings(), declared.section), declared.name)
    assert declared.default is None or isinstance(declared.default, declared.kind)
    assert not declared.choices or declared.default in declared.choices


def test_the_forms_of_a_name():
    declared = DECLARED["link.max_speed"]
    assert (declared.key, declared.option, declared.parameter) == (
        "link.max_speed",
        "--link-max-speed",
        "link_max_speed",
    )
    assert (declared.kind, declared.unit, declared.choices) == (float, "µm/s", ())
    assert DECLARED["link.max_gap"].kind is int
    assert DECLARED["fit.longest_lag"].kind is float
    assert DECLARED["clean.drift"].choices == ("auto", "off")
    assert DECLARED["clean.drift"].kind is str


def test_no_two_settings_share_an_option():
    assert len({declared.option for declared in DECLARED.values()}) == len(DECLARED)
    assert len({declared.parameter for declared in DECLARED.values()}) == len(DECLARED)


def test_nothing_given_gives_the_defaults():
    resolved = resolve()
    assert resolved.values == Settings()
    assert {resolved.source(key) for key in DECLARED} == {"default"}


def test_an_option_wins_over_the_file_and_the_file_over_the_default():
    resolved = resolve(
        file={"link": {"max_speed": 3.0, "max_gap": 1}, "interval": {}},
        options={"link.max_speed": 4.0, "fit.longest_lag": 2.0},
    )
    assert resolved.values.link == LinkSettings(max_speed=4.0, max_gap=1)
    assert resolved.values.fit.longest_lag == 2.0
    keys = ("link.max_speed", "link.max_gap", "fit.longest_lag", "interval.level")
    assert [resolved.source(key) for key in keys] == ["option", "file", "option", "default"]


def test_settings_do_not_change():
    with pytest.raises(ValidationError, match="frozen"):
        Settings().link.max_speed = 3.0


@given(speed=st.floats(1e-6, 1e6), gap=st.integers(0, 10**6), track=st.text(min_size=1))
def test_values_within_their_limits_come_through(speed, gap, track):
    file = {"link": {"max_speed": speed, "max_gap": gap}, "columns": {"track": track}}
    values = resolve(file=file).values
    assert (values.link.max_speed, values.link.max_gap) == (speed, gap)
    assert values.columns.track == track


def test_defaults_come_through_toml():
    lines = [
        f"{key} = {declared.default!r}"
        for key, declared in DECLARED.items()
        if declared.default is not None
    ]
    assert resolve(file=tomllib.loads("\n".join(lines))).values == Settings()


@pytest.mark.parametrize(
    ("file", "message"),
    [
        (
            {"link": {"max_sped": 3}},
            "s.toml: 'link.max_sped' is no setting; expected a known setting. "
            "Did you mean 'link.max_speed'?",
        ),
        (
            {"lnk": {"max_speed": 3}},
            "s.toml: 'lnk' is no setting; expected a known setting. Did you mean 'link'?",
        ),
        (
            {"x": {"q": 3}},
            "s.toml: 'x' is no setting; expected a known setting. README.md lists all settings.",
        ),
        (
            {"lnk": {}},
            "s.toml: 'lnk' is no setting; expected a known setting. Did you mean 'link'?",
        ),
        (
            {"link": 3},
            "s.toml: 'link' is 3; expected a section with settings. Write [link] on a line of its "
            "own and its settings below.",
        ),
        (
            {"max_speed": 3},
            "s.toml: 'max_speed' stands in no section; expected every setting in its section. Put "
            "it below [link].",
        ),
        (
            {"link": {"max_speed": True}},
            "s.toml, link.max_speed: the value is True; expected a valid number (µm/s). "
            "The default is 12.0.",
        ),
        (
            {"link": {"max_speed": "8"}},
            "s.toml, link.max_speed: the value is '8'; expected a valid number (µm/s). "
            "The default is 12.0.",
        ),
        (
            {"columns": {"track": ""}},
            "s.toml, columns.track: the value is ''; expected a name. The default is track.",
        ),
        (
            {"link": {"max_speed": -1}},
            "s.toml, link.max_speed: the value is -1; expected a value greater than 0 (µm/s). "
            "The default is 12.0.",
        ),
        (
            {"link": {"max_speed": math.nan}},
            "s.toml, link.max_speed: the value is nan; expected a finite number (µm/s). "
            "The default is 12.0.",
        ),
        (
            {"link": {"max_gap": 2.5}},
            "s.toml, link.max_gap: the value is 2.5; expected a whole number (frames). "
            "The default is 2.",
        ),
        (
            {"clean": {"drift": "yes"}},
            "s.toml, clean.drift: the value is 'yes'; expected auto or off. The default is auto.",
        ),
        (
            {"interval": {"resamples": 100_001}},
            "s.toml, interval.resamples: the value is 100001; expected a value less than or equal "
            "to 100000. The default is 2000.",
        ),
        (
            {"fit": {"longest_lag": 0}},
            "s.toml, fit.longest_lag: the value is 0; expected a value greater than 0 (s). "
            "The default is chosen from the data.",
        ),
        (
            {"columns": {"track": 3}},
            "s.toml, columns.track: the value is 3; expected a valid string. The default is track.",
        ),
    ],
)
def test_a_setting_that_is_wrong(file, message):
    assert problems(file=file) == [message]


def test_a_wrong_option_is_called_as_it_was_typed():
    assert problems(options={"link.max_speed": 0}, file={"link": {"max_speed": 2}}) == [
        "option --link-max-speed: the value is 0; expected a value greater than 0 (µm/s). "
        "The default is 12.0."
    ]


def test_everything_wrong_is_said_at_once():
    file = {"link": {"max_sped": 3, "max_gap": -1}, "interval": {"level": 1}}
    found = problems(file=file, options={"clean.odds": 0.5})
    assert [line.split(": ")[0] for line in found] == [
        "s.toml",
        "s.toml, link.max_gap",
        "option --clean-odds",
        "s.toml, interval.level",
    ]


def limits():
    """Key, a value at the limit, the limit's kind, for every limit of every setting."""
    for section, name, field in fields():
        for limit in field.metadata:
            for kind in ("gt", "ge", "lt", "le"):
                if (value := getattr(limit, kind, None)) is not None:
                    yield pytest.param(
                        f"{section}.{name}", kind, value, id=f"{section}.{name}-{kind}"
                    )


@pytest.mark.parametrize(("key", "kind", "limit"), list(limits()))
def test_every_limit_holds_exactly(key, kind, limit):
    section, name = key.split(".")
    is_whole = DECLARED[key].kind is int
    step = 1 if is_whole else 1e-9 * max(abs(limit), 1)
    inward = limit + step if kind in ("gt", "ge") else limit - step
    outward = limit - step if kind in ("gt", "ge") else limit + step
    allowed = [inward] if kind in ("gt", "lt") else [inward, limit]
    refused = [outward, limit] if kind in ("gt", "lt") else [outward]
    for value in allowed:
        assert getattr(getattr(resolve(file={section: {name: value}}).values, section), name) == (
            value
        )
    for value in refused:
        assert problems(file={section: {name: value}})[0].startswith(f"s.toml, {key}: the value")
