"""`bendcast sightline`: pictures and words of one time, or one clear reason why not."""

from __future__ import annotations

import pytest

from forecast.cli import main
from tests.end_to_end.build import SETTINGS, lay_out


@pytest.fixture(scope="module")
def place(tmp_path_factory):
    folder = tmp_path_factory.mktemp("sightline")
    return folder, lay_out(folder)


def run(capsys, *arguments):
    code = main(["sightline", *map(str, arguments)])
    told = capsys.readouterr()
    return code, told.out, told.err


def test_pictures_and_words_of_a_time(place, capsys):
    folder, settings = place
    out = folder / "seen"
    # An offset is heeded: 08:10 at +02:00 is 06:10 UTC, nearest to the ascent of six o'clock.
    at = "2024-06-01T08:10+02:00"
    code, said, _ = run(capsys, settings, "--at", at, "--name", "lamp", "-o", out)
    assert code == 0
    assert "lamp, 2024-06-01T06" in said
    assert "visible heights at" in said
    assert "relay" not in said
    made = {path.name for path in out.iterdir() if not path.name.startswith(".")}
    assert len(made) == 4
    assert {name.rpartition(".")[2] for name in made} == {"png", "svg"}
    assert all(str(out / name) in said for name in made)
    assert (out / "lamp-where-to-stand.png").read_bytes()[:4] == b"\x89PNG"


def test_without_a_time_the_likeliest_of_each_is_drawn(place, capsys):
    folder, settings = place
    code, said, _ = run(capsys, settings, "-o", folder / "likely")
    assert code == 0
    assert "lamp, " in said
    assert "relay, " in said
    assert "nan" not in said.lower()


@pytest.mark.parametrize(
    ("arguments", "code", "words"),
    [
        (("--name", "lmap"), 5, "found 'lmap'; the settings have lamp"),
        (("--at", "tomorrow"), 5, "found 'tomorrow'; expected a time such as"),
        (("--at", "2024-07-01"), 4, "choose a time within a day of the soundings"),
    ],
)
def test_what_cannot_be_drawn_is_one_clear_message(place, capsys, arguments, code, words):
    folder, settings = place
    found, _, err = run(capsys, settings, *arguments, "-o", folder / "none")
    assert (found, words in err) == (code, True), err
    assert not list((folder / "none").glob("*.png"))


def test_settings_without_a_sightline_say_so(tmp_path, capsys):
    settings = lay_out(tmp_path)
    text = SETTINGS.partition("[[sightline]]")[0]
    settings.write_text(text, encoding="utf-8")
    code, _, err = run(capsys, settings)
    assert code == 5
    assert "no [[sightline]]" in err
