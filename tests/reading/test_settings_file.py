"""The settings file: its sections come back as they stand, and errors name line and column."""

import tomllib

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from glidefit.errors import InputError, InputErrors
from glidefit.reading.settings_file import read_settings
from glidefit.settings import declarations, resolve


def write(tmp_path, content):
    path = tmp_path / "glidefit.toml"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def problem(path):
    with pytest.raises(InputError) as caught:
        read_settings(path)
    return str(caught.value)


@pytest.mark.parametrize("mark", ["", "\ufeff"])
def test_sections_come_back_as_they_stand(tmp_path, mark):
    text = f'{mark}# fast\n[link]\nmax_speed = 8.0\n\n[columns]\r\ntrack = "particle"\n'
    assert read_settings(write(tmp_path, text)) == {
        "link": {"max_speed": 8.0},
        "columns": {"track": "particle"},
    }


@pytest.mark.parametrize("text", ["", "\n\n", "# nothing is set\n"])
def test_a_file_may_set_nothing(tmp_path, text):
    assert read_settings(write(tmp_path, text)) == {}


def test_errors_of_the_content_are_those_of_the_settings(tmp_path):
    path = write(tmp_path, "[link]\nmax_sped = 8.0\n")
    with pytest.raises(InputErrors) as caught:
        resolve(file=read_settings(path), file_name=path.name)
    assert str(caught.value) == (
        "glidefit.toml: 'link.max_sped' is no setting; expected a known setting. "
        "Did you mean 'link.max_speed'?"
    )


SETTING = (
    "expected a setting as name = value. "
    'For example max_speed = 8.0 under [link], or track = "particle" under [columns].'
)
SECTION = (
    "expected a section in brackets, such as [link]. "
    "Put the name of the section between one pair of brackets."
)
ALONE = "expected nothing after a number but a comment that begins with #."
TEXT = "expected a number, or text in quotation marks."
DIGITS = "expected a number with digits on both sides of its point."
TWICE = "expected each setting once in its section. Delete one of the lines."
OWN_LINE = "Write each setting on a line of its own, and a backslash in text as \\\\."
QUOTE = 'expected text as "…" on one line. Close the quotation mark.'


@pytest.mark.parametrize(
    ("text", "where", "message"),
    [
        ("[link]\nmax_gap 2", "line 2, column 9", f"cannot read 'max_gap 2'; {SETTING}"),
        ("max_gap: 2", "line 1, column 8", f"cannot read 'max_gap: 2'; {SETTING}"),
        ("max_gap =\n", "line 1, column 10", f"cannot read 'max_gap ='; {SETTING}"),
        ("max_gap = ", "line 1, at its end", f"cannot read 'max_gap ='; {SETTING}"),
        ("= 2", "line 1, column 1", f"cannot read '= 2'; {SETTING}"),
        ("µ = 2", "line 1, column 1", f"cannot read 'µ = 2'; {SETTING}"),
        ("[link\nmax_gap = 2", "line 1, column 6", f"cannot read '[link'; {SECTION}"),
        ("\n[link", "line 2, at its end", f"cannot read '[link'; {SECTION}"),
        ("[link]]", "line 1, column 7", f"cannot read '[link]]'; {SECTION}"),
        ("max_speed = 0,5", "line 1, column 14", "cannot read 'max_speed = 0,5'; "
         "expected a number with a decimal point. Write 0.5."),
        ("bend = .5", "line 1, column 8", f"cannot read 'bend = .5'; {DIGITS} Write 0.5."),
        ("bend = 5.", "line 1, column 9", f"cannot read 'bend = 5.'; {DIGITS} Write 5.0."),
        ("a = 8 µm/s", "line 1, column 7", f"cannot read 'a = 8 µm/s'; {ALONE} "
         "Write a = 8, and every setting on a line of its own."),
        ("a = 8; b = 2", "line 1, column 6", f"cannot read 'a = 8; b = 2'; {ALONE} "
         "Write a = 8, and every setting on a line of its own."),
        ("drift = off # x", "line 1, column 9", f"cannot read 'drift = off # x'; {TEXT} "
         'For text write drift = "off".'),
        ("a = True", "line 1, column 5", f'cannot read \'a = True\'; {TEXT} For text write '
         'a = "True".'),
        ("a = 'x' 'y'", "line 1, column 9", f'cannot read "a = \'x\' \'y\'"; {TEXT} {OWN_LINE}'),
        ('a = "C:\\q"', "line 1, column 10", f"cannot read 'a = \"C:\\\\q\"'; {TEXT} {OWN_LINE}"),
        ('a = "x', "line 1, at its end", "cannot read 'a = \"x': a quotation mark is never "
         f"closed; {QUOTE}"),
        ("a = 'x", "line 1, at its end", "cannot read \"a = 'x\": a quotation mark is never "
         f"closed; {QUOTE}"),
        ("a = 1\na = 2\nb = 3", "line 2, column 6", f"'a' is set twice; {TWICE}"),
        ("a = 1\na = 2\n\n", "line 2, column 6", f"'a' is set twice; {TWICE}"),
        ("a = 1\na = 2", "line 2, at its end", f"'a' is set twice; {TWICE}"),
        ("[link]\n[fit]\n[link]\na = 1", "line 3, column 6", "the section [link] begins a second "
         "time; expected each section once. Move its settings to the first one."),
    ],
)  # fmt: skip
def test_a_file_that_is_no_toml(tmp_path, text, where, message):
    assert problem(write(tmp_path, text)) == f"glidefit.toml, {where}: {message}"


def test_a_file_that_cannot_be_read_as_text(tmp_path):
    assert problem(write(tmp_path, "# µm".encode("latin-1"))) == (
        "glidefit.toml: line 1 holds the byte 0xB5, which is not UTF-8 (in Latin-1 it is 'µ'); "
        "expected text in UTF-8. Save it as UTF-8 in a text editor."
    )
    assert problem(write(tmp_path, "a = 1".encode("utf-16"))) == (
        "glidefit.toml: the file is written in UTF-16; expected text in UTF-8. "
        "Save it as UTF-8 in a text editor."
    )


def test_a_file_that_is_not_there(tmp_path):
    write(tmp_path, "")
    assert problem(tmp_path / "glidfit.toml") == (
        f"glidfit.toml: there is no such file in {tmp_path}; expected a settings file in TOML. "
        "Did you mean 'glidefit.toml'?"
    )
    assert problem(tmp_path) == (
        f"{tmp_path.name}: is a folder; expected a settings file in TOML. "
        "Give the path of the file itself."
    )


def test_messages_call_the_file_what_it_should_be(tmp_path):
    with pytest.raises(InputError, match="expected a recipe in TOML"):
        read_settings(tmp_path / "nothere.toml", expected="a recipe in TOML")


LINES = st.text(st.sampled_from("[]=\"'.,#\\ a1_µ\n{}-:T"), max_size=30)


@settings(
    max_examples=300, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture]
)
@given(text=LINES)
def test_any_text_is_read_or_refused_with_a_place(tmp_path, text):
    path = write(tmp_path, text)
    try:
        expected = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        assert problem(path).startswith("glidefit.toml, line ")
    else:
        assert read_settings(path) == expected


def test_every_default_can_be_written_in_a_file(tmp_path):
    lines = []
    for declared in declarations():
        if declared.default is not None:
            text = f'"{declared.default}"' if declared.kind is str else declared.default
            lines.append(f"{declared.key} = {text}")
    resolved = resolve(file=read_settings(write(tmp_path, "\n".join(lines))))
    assert resolved.values == resolve().values
    assert len(resolved.sources) == len(lines) > 20
