"""``bandratio plan``: bands and filter sets as typed, and one line for whatever is wrong."""

import pytest

from bandratio.__main__ import main

GROUPS = ["--wanted", "olivine,low-calcium pyroxene", "--unwanted", "plagioclase,opaque"]


def run(capsys, *arguments):
    with pytest.raises(SystemExit) as left:
        main(["plan", *arguments])
    captured = capsys.readouterr()
    return left.value.code or 0, captured.out, captured.err


def test_bands(capsys):
    code, out, _ = run(
        capsys, "bands", "--wavelengths", "480,600,750,830,950", "--size", "2", *GROUPS, "--relative", "0.01"
    )
    assert code == 0
    assert "750, 950" in out
    assert "this rests on 9 wanted specimens (15 spectra) and 7 unwanted (8 spectra)" in out
    assert "redundant" in out


def test_sets(capsys, tmp_path):
    file = tmp_path / "filters.csv"
    file.write_text("set,wavelength,fwhm,relative\nA,480,20,.01\nA,600,20,.01\nB,750,20,.01\nB,950,20,.01\n")
    code, out, _ = run(capsys, "sets", str(file), *GROUPS)
    assert code == 0
    assert "B is better" in out or "not told apart" in out
    assert "r750_r950" in out


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (
            ["bands", "--wavelengths", "480,600", "--size", "3", *GROUPS],
            "size must be a number of bands from 2 to the 2",
        ),
        (
            [
                "bands",
                "--wavelengths",
                "480,600",
                "--size",
                "2",
                "--wanted",
                "olivin",
                "--unwanted",
                "opaque",
            ],
            "did you mean",
        ),
        (["bands", "--wavelengths", "480,600", "--size", "two", *GROUPS], "'two' is not a valid integer"),
        (["bands", "--size", "2", *GROUPS], "Missing option '--wavelengths'"),
        (
            ["bands", "--wavelengths", "480,600", "--size", "2", "--keep", "470", *GROUPS],
            "keep: 470 nm is no candidate",
        ),
        (["sets", "absent.csv", *GROUPS], "absent.csv"),
    ],
)
def test_bad_input_is_one_line_and_exit_code_two(capsys, arguments, message):
    code, _, err = run(capsys, *arguments)
    assert code == 2
    assert message in err
    assert err.count("\n") == 1


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("set,wavelength,width\nA,480,20\n", "unknown column 'width'"),
        ("wavelength\n480\n", "wanted the columns set and wavelength, got wavelength"),
        ("set,wavelength\nA,480\nA,red\n", "row 3: wavelength must be a number, got 'red'"),
        ("set,wavelength\nA,480\nA,600\n", "two filter sets or more to compare, got A"),
        ("", "not readable as a table"),
    ],
)
def test_bad_tables_of_sets(capsys, tmp_path, text, message):
    file = tmp_path / "filters.csv"
    file.write_text(text)
    code, _, err = run(capsys, "sets", str(file), *GROUPS)
    assert code == 2
    assert message in err


def test_help_shows_an_example(capsys):
    for word in ("bands", "sets"):
        code, out, _ = run(capsys, word, "--help")
        assert code == 0
        assert f"Example: bandratio plan {word}" in out


def test_no_word_at_all_is_answered_with_the_help(capsys):
    code, out, err = run(capsys)
    assert (code, err) == (2, "")
    assert "bands" in out
    assert out.count("\n") > 5
