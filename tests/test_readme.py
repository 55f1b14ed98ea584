"""What the README shows is what the tool prints."""

from pathlib import Path

from fastsmooth.cli import main
from fastsmooth.demo import BLOCK, WHERE

README = Path(__file__).parent.parent.joinpath("README.md").read_text(encoding="utf-8")


def words(text: str) -> str:
    return " ".join(text.split())


def shown(first_line: str, last_line: str) -> str:
    start = README.index(first_line)
    return words(README[start : README.index(last_line, start) + len(last_line)])


def test_the_tour_is_what_the_demo_prints(tmp_path, capsys):
    main(["demo", str(tmp_path)])
    told = words(capsys.readouterr().out)
    assert shown("power_kw against wet_bulb_c\nrows", "thin\n```").removesuffix(" ```") in told
    data = str(tmp_path / "data")
    main(["curve", data, "--x", "wet_bulb_c", "--y", "power_kw", "--where", WHERE])
    caution = words(capsys.readouterr().out)
    assert shown("caution    Residuals", "--block logged_at:day.") in caution
    assert f"--block {BLOCK}" in README


def test_every_option_and_command_of_the_tour_exists(capsys):
    main(["curve", "--help"])
    known = capsys.readouterr().out
    for line in README.splitlines():
        if line.startswith("fastsmooth curve ..."):
            for word in line.split("#")[0].split():
                if word.startswith("--"):
                    assert word in known
