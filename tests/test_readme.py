"""README.md says what is true: its examples run as shown, and its options, keys, files and set-up lines exist."""

import dataclasses
import re
import shlex
import tomllib

import click
import pytest

import converter.cli
from converter.jobs.fair import FairSettings, fair_drawing
from converter.jobs.records import DeviationRecord, FairRecord, ProfileRecord
from tests.readme_examples import README, ROOT, agrees, examples, run_all
from tests.traced_drawings import save_outline

TEXT = README.read_text(encoding="utf-8")
OTHERS = {"--help", "--version"}  # options of every command line, which need no word in README
ELSEWHERE = {"-m"}  # options of other programs in the set-up lines


def section(title):
    """Text under a heading of README, up to the next one of the same or a higher rank."""
    start = re.search(rf"^(#+) {re.escape(title)}$", TEXT, re.MULTILINE)
    assert start, f"README has no heading {title!r}"
    rest = TEXT[start.end() :]
    end = re.search(rf"^#{{1,{len(start[1])}}} ", rest, re.MULTILINE)
    return rest[: end.start()] if end else rest


def options_of(command):
    """Names of the options that the help of a command lists, beside those of every command."""
    context = click.Context(converter.cli.cli, info_name="fairbatten")
    parameters = converter.cli.cli.get_command(context, command).params
    return {name for parameter in parameters for name in parameter.opts if name.startswith("-")}


# Examples -------------------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def run_examples(tmp_path_factory):
    found = examples(TEXT)
    return list(zip(found, run_all(found, tmp_path_factory.mktemp("readme")), strict=True))


@pytest.mark.parametrize("number", range(len(examples(TEXT))), ids=[example.command for example in examples(TEXT)])
def test_an_example_prints_what_is_shown(run_examples, number):
    example, printed = run_examples[number]
    hint = "; python -m tests.refresh_readme brings README up to date"
    assert len(printed) == len(example.shown), f"{example.command} prints {len(printed)} lines{hint}: {printed}"
    for shown, line in zip(example.shown, printed, strict=True):
        assert agrees(shown, line), f"{example.command}{hint}:\nshown   {shown}\nprinted {line}"


def test_every_command_has_an_example_and_every_line_with_a_prompt_is_one():
    commands = [example.command for example in examples(TEXT)]
    for name in converter.cli.cli.list_commands(None):
        assert any(command.startswith(f"fairbatten {name} ") for command in commands)
    assert len(commands) == len(re.findall(r"^\s*\$ ", TEXT, re.MULTILINE))


@pytest.mark.parametrize(
    ("shown", "printed", "same"),
    [
        ("SPLINE, 15 control points", "SPLINE,  15 control points", True),
        ("deviation 0.203 of 0.25", "deviation 0.206 of 0.25", True),
        ("mean -0.00028", "mean +0.0013", True),
        ("deviation 0.203 of 0.25", "deviation 0.23 of 0.25", False),
        ("SPLINE, 15 control points", "SPLINE, 17 control points", True),
        ("SPLINE, 15 control points", "SPLINE, 25 control points", False),
        ("168 -> 0", "168 -> 2", True),
        ("8E arcs 18 20 0.021 0.201", "8E arcs 17 21 0.021 0.201", True),
        ("8E arcs 18 20 0.021 0.201", "8E arcs 24 20 0.021 0.201", False),
        ("8 arcs (least 9)", "8 arcs (least 10)", True),
        ("8 arcs (least 9)", "8 arcs (least 14)", False),
        ("168 -> 0", "168 -> 3", False),
        ("168 -> 0", "167 -> 0", False),
        ("3 profiles faired", "2 profiles faired", False),
        ("none out of tolerance", "out of tolerance: 8E", False),
        ("two words", "two words more", False),
    ],
)
def test_what_counts_as_the_same_line(shown, printed, same):
    assert agrees(shown, printed) is same


def test_the_python_example_runs(tmp_path, monkeypatch):
    (source,) = re.findall(r"^```python\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)
    (tmp_path / "samples").symlink_to(ROOT / "samples")
    monkeypatch.chdir(tmp_path)
    names = {}
    exec(source, names)
    assert names["record"].profiles
    assert (tmp_path / "bracket-python.dxf").exists()


# Set-up lines ---------------------------------------------------------------------------------------------------------


def test_one_line_sets_up_and_runs_the_main_job_and_one_passes_the_tests():
    lines = re.findall(r"^```sh\n(.*)\n```$", TEXT, re.MULTILINE)
    assert len(lines) == 2
    job, tests = ([shlex.split(part) for part in line.split(" && ")] for line in lines)
    for parts in (job, tests):
        assert parts[0] == ["python3", "-m", "venv", ".venv"]
        assert parts[1][:2] == [".venv/bin/pip", "install"]
    extras = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["optional-dependencies"]
    assert (job[1][2], tests[1][2]) == (".", ".[test]")
    assert any(need.startswith("pytest") for need in extras["test"])
    assert job[2][0] == ".venv/bin/fairbatten"
    assert job[2][1:3] == ["fair", "samples/bracket.dxf"]
    assert tests[2] == [".venv/bin/python", "-m", "pytest"]
    scripts = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]["scripts"]
    assert scripts["fairbatten"] == "converter.cli:main"


def test_the_main_job_of_the_set_up_line_runs(tmp_path, monkeypatch, capsys):
    (words,) = re.findall(r"\.venv/bin/fairbatten (.*)", TEXT)
    (tmp_path / "samples").symlink_to(ROOT / "samples")
    monkeypatch.chdir(tmp_path)
    with pytest.raises(SystemExit) as caught:
        converter.cli.main(shlex.split(words))
    assert caught.value.code == 0
    assert "none out of tolerance" in capsys.readouterr().out
    assert (tmp_path / "bracket-faired.dxf").exists()


# Options, keys, files -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("command", "title"), [("inspect", "Look at a drawing: `inspect`"), ("fair", "Fair a drawing: `fair`")]
)
def test_the_table_of_options_is_that_of_the_help(command, title):
    rows = re.findall(r"^\| (`-.*?) \|", section(title), re.MULTILINE)
    listed = {name for row in rows for name in re.findall(r"(?<![\w-])--?[a-z][a-z-]*", row)}
    assert listed == options_of(command)


def test_every_option_that_is_named_exists():
    known = OTHERS | ELSEWHERE | {"-n"}
    for command in converter.cli.cli.list_commands(None):
        known |= options_of(command)
    named = set(re.findall(r"(?<![\w-])--?[a-z][a-z-]*", TEXT))
    assert named <= known
    assert "--tolerance" in named


def test_every_file_that_is_named_exists():
    named = set(re.findall(r"samples/[\w.-]+\w", TEXT)) | set(re.findall(r"\]\(([^)#:]+)\)", TEXT))
    assert "samples/bracket.dxf" in named
    missing = {name for name in named if not (ROOT / name).exists()}
    assert missing == set()


def keys_in(title, heading):
    """Keys listed in the first column of a table that has a heading."""
    _, _, rest = section(title).partition(f"| {heading} |")
    assert rest, f"no table headed {heading!r}"
    table = rest.split("\n\n")[0]
    return {key for row in re.findall(r"^\| (`.*?) \|", table, re.MULTILINE) for key in re.findall(r"`(\w+)`", row)}


def test_the_keys_of_the_record_are_those_listed(tmp_path):
    whole = {field.name for field in dataclasses.fields(FairRecord)} | {"within_tolerance", "within_budget"}
    assert keys_in("Record", "key") == whole
    assert keys_in("Record", "key of a profile") == {field.name for field in dataclasses.fields(ProfileRecord)}
    parts = section("Record")
    for field in dataclasses.fields(DeviationRecord):
        assert f"`{field.name}`" in parts
    record = fair_drawing(save_outline(tmp_path / "in.dxf"), tmp_path / "out.dxf", FairSettings()).as_json()
    for key in (*record["profiles"][0]["fairness"]["after"], *record["profiles"][0]["corners"][0]):
        assert f"`{key}`" in parts


def test_the_job_stands_in_one_paragraph_on_top():
    paragraphs = TEXT.split("\n\n")
    assert paragraphs[0] == "# fairbatten"
    for word in ("DXF", "tolerance", "corners", "proven"):
        assert word in paragraphs[1]
    assert paragraphs[2].startswith("## ")


def test_cautions_and_exit_codes_are_told():
    cautions = section("Before you cut")
    for word in ("scrap", "kerf", "tool radius", "local codes", "licensed engineer"):
        assert word in cautions
    assert re.findall(r"^\| (\d+) \|", section("Exit codes and errors"), re.MULTILINE) == ["0", "1", "2", "130"]
    assert f"### {converter.__version__}" in section("Changes")
