"""What the README shows is what the tool prints."""

from pathlib import Path

import pytest

from fastsmooth.cli import main
from fastsmooth.demo import BLOCK, WHERE

README = Path(__file__).parent.parent.joinpath("README.md").read_text(encoding="utf-8")


# First words and last words of what the commands of a night print.
NIGHT = (
    ("power_kw against wet_bulb_c, by plant", "blocks share one fold."),
    ("power_kw against wet_bulb_c, held against curves of 6", "wrote      flagged"),
    ("power_kw against wet_bulb_c: now less base\nunits", "one block only."),
)


def shown(first_line: str, last_line: str) -> list[str]:
    start = README.index(first_line)
    return README[start : README.index(last_line, start) + len(last_line)].split()


def assert_alike(wanted: list[str], told: list[str]) -> None:
    """Words are the same; figures agree to 2 percent (counts of points: to a few)."""
    for want, got in zip(wanted, told, strict=True):
        try:
            figure = float(want.strip(",;:%()").replace(",", ""))
        except ValueError:
            assert got == want
        else:
            other = float(got.strip(",;:%()").replace(",", ""))
            assert other == pytest.approx(figure, rel=0.02, abs=4.0 if figure == int(figure) else 0)


def from_words(told: str, first: str, count: int) -> list[str]:
    return told[told.index(first) :].split()[:count]


def test_the_tour_is_what_the_demo_prints(tmp_path, capsys):
    main(["demo", str(tmp_path)])
    wanted = shown("power_kw against wet_bulb_c\nrows", "thin\n```")[:-1]
    told = capsys.readouterr().out
    assert_alike(wanted, from_words(told, "power_kw against wet_bulb_c", len(wanted)))
    for first, last in NIGHT:
        wanted = shown(first, last)
        assert_alike(wanted, from_words(told.replace(f"{tmp_path}/", ""), first, len(wanted)))
    data = str(tmp_path / "data")
    main(["curve", data, "--x", "wet_bulb_c", "--y", "power_kw", "--where", WHERE])
    wanted = shown("caution    Residuals", "--block logged_at:day.")
    assert_alike(wanted, from_words(capsys.readouterr().out, "caution    Residuals", len(wanted)))
    assert f"--block {BLOCK}" in README


def test_every_option_and_command_of_the_tour_exists(capsys):
    main(["curve", "--help"])
    known = capsys.readouterr().out
    for line in README.splitlines():
        if line.startswith("fastsmooth curve ..."):
            for word in line.split("#")[0].split():
                if word.startswith("--"):
                    assert word in known
