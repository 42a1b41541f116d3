"""The command line run as a process: output, exit codes, and one line for every error."""

import json
import os
import subprocess
import sys
from pathlib import Path

import click
import ezdxf
import pytest
from click.testing import CliRunner

from converter.errors import ConverterError
from converter.options import INPUT, GroupedCommand, LengthType, option
from converter.units import Length, unit_from_name

ROOT = Path(__file__).parent.parent


def run(*arguments, **options):
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONWARNINGS": "error"}
    words = [sys.executable, "-m", "converter", *map(str, arguments)]
    return subprocess.run(
        words, capture_output=True, text=True, env=environment, cwd=options.pop("cwd", ROOT), timeout=60
    )


@pytest.fixture
def drawing(tmp_path):
    doc = ezdxf.new("R2010", units=4)
    m = doc.modelspace()
    m.add_lwpolyline([(0, 0), (20, 0), (20, 10), (0, 10)], close=True, dxfattribs={"layer": "[red]CUT"})
    m.add_text("note")
    doc.saveas(tmp_path / "in.dxf")
    return tmp_path / "in.dxf"


def one_line_error(result, *words):
    assert result.returncode == 2
    assert result.stdout == ""
    assert result.stderr.startswith("error: ")
    assert result.stderr.count("\n") == 1
    for word in words:
        assert word in result.stderr


def test_help_names_the_commands_and_asks_for_no_heavy_library():
    result = run("--help")
    assert result.returncode == 0
    assert "inspect" in result.stdout
    assert "fair" in result.stdout
    code = "import sys, converter.cli as c\ntry:\n c.main(['--help'])\nexcept SystemExit: print(sorted(sys.modules))"
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, check=True)
    loaded = result.stdout.splitlines()[-1]
    assert "'click'" in loaded
    for heavy in ("numpy", "scipy", "ezdxf", "shapely", "rich"):
        assert f"'{heavy}'" not in loaded


def test_no_command_shows_the_help():
    assert run().stdout == run("--help").stdout


def test_version():
    result = run("--version")
    assert (result.returncode, result.stdout.split()[0]) == (0, "fairbatten")


def test_inspect_prints_the_facts(drawing):
    result = run("inspect", drawing)
    assert result.returncode == 0
    assert result.stderr == ""
    assert "DXF R2010, units: mm" in result.stdout
    assert "[red]CUT" in result.stdout
    assert "LWPOLYLINE, closed" in result.stdout
    assert result.stdout.splitlines()[-1].startswith("next: ")


def test_inspect_as_json_is_the_record_and_nothing_else(drawing):
    record = json.loads(run("inspect", drawing, "--json").stdout)
    assert record["profiles"][0]["length"] == 60.0
    assert record["entities"]["0"] == {"TEXT": 1}


def test_options_reach_the_job(drawing):
    record = json.loads(run("inspect", drawing, "--json", "--gap", "0.1in", "--units", "inch", "--layer", "0").stdout)
    assert record["gap"] == 0.1
    assert record["units"] == "in"
    assert record["profiles"] == []


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["inspct"], ["No such command", "fairbatten --help"]),
        (["inspect"], ["Missing argument", "fairbatten inspect --help"]),
        (["inspect", "in.dxf", "--gap", "much"], ["--gap", "not a length"]),
        (["inspect", "in.dxf", "--gap", "0,5"], ["decimal point"]),
        (["inspect", "in.dxf", "--units", "cubit"], ["cubit", "not a unit"]),
        (["inspect", "in.dxf", "--layer", "NONE"], ["in.dxf", "no layer 'NONE'"]),
        (["inspect", "in.dxf", "--colour"], ["--colour"]),
        (["inspect", "no.dxf"], ["no.dxf", "cannot be read"]),
        (["inspect", "."], ["folder"]),
    ],
)
def test_every_error_is_one_line_and_exit_code_2(drawing, arguments, words):
    before = drawing.read_bytes()
    one_line_error(run(*arguments, cwd=drawing.parent), *words)
    assert drawing.read_bytes() == before
    assert os.listdir(drawing.parent) == ["in.dxf"]


@pytest.mark.parametrize(
    "content", [b"", b"\0" * 500, b"0\nSECTION\n2\nENTITIES\n0\nLINE\n5\nXYZ\n", bytes(range(256)) * 20]
)
def test_damaged_files_never_end_in_a_traceback(tmp_path, content):
    (tmp_path / "in.dxf").write_bytes(content)
    result = run("inspect", tmp_path / "in.dxf")
    assert result.returncode in (0, 2)
    assert "Traceback" not in result.stderr
    assert result.stderr.count("\n") <= 1


def test_a_unit_in_a_unitless_drawing_says_what_to_do(tmp_path):
    doc = ezdxf.new("R2010", units=0)
    doc.modelspace().add_line((0, 0), (1, 0))
    doc.saveas(tmp_path / "in.dxf")
    one_line_error(run("inspect", tmp_path / "in.dxf", "--gap", "1mm"), "--units mm")
    assert "states no units" in run("inspect", tmp_path / "in.dxf").stdout


def test_names_that_the_terminal_cannot_show_are_no_error(tmp_path):
    doc = ezdxf.new("R2010", units=4)
    doc.modelspace().add_line((0, 0), (1, 0), dxfattribs={"layer": "Žłab 漢"})
    doc.saveas(tmp_path / "in.dxf")
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "ascii", "PYTHONUTF8": "0"}
    words = [sys.executable, "-m", "converter", "inspect", str(tmp_path / "in.dxf")]
    result = subprocess.run(words, capture_output=True, text=True, env=environment, cwd=ROOT, timeout=60)
    assert (result.returncode, result.stderr) == (0, "")
    assert "\\u6f22" in result.stdout


def test_a_reader_that_goes_away_is_no_error(drawing):
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    words = [sys.executable, "-m", "converter", "inspect", str(drawing), "--json"]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=environment, cwd=ROOT)
    process.stdout.close()
    assert process.stderr.read() == b""
    process.stderr.close()
    assert process.wait(60) == 0


def test_a_fault_of_our_own_is_one_line_unless_asked_for_more(monkeypatch, capsys):
    import converter.cli as module

    def broken(*_, **__):
        raise ZeroDivisionError("division\nby zero")

    monkeypatch.setattr(module.cli, "invoke", broken)
    monkeypatch.delenv("FAIRBATTEN_TRACEBACK", raising=False)
    with pytest.raises(SystemExit) as caught:
        module.main(["inspect"])
    assert caught.value.code == 2
    assert capsys.readouterr().err.count("\n") == 1
    monkeypatch.setenv("FAIRBATTEN_TRACEBACK", "1")
    with pytest.raises(ZeroDivisionError):
        module.main(["inspect"])


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (ConverterError("two\nlines"), 2),
        (MemoryError(), 2),
        (PermissionError(13, "denied", "x"), 2),
        (KeyboardInterrupt(), 130),
    ],
)
def test_errors_have_their_exit_codes(monkeypatch, capsys, error, code):
    import converter.cli as module

    def failing(*_, **__):
        raise error

    monkeypatch.setattr(module.cli, "invoke", failing)
    with pytest.raises(SystemExit) as caught:
        module.main(["inspect"])
    assert caught.value.code == code
    assert capsys.readouterr().err.count("\n") == 1


def test_the_result_of_a_command_is_the_exit_code(monkeypatch):
    import converter.cli as module

    for result, code in ((None, 0), (1, 1), (0, 0)):
        monkeypatch.setattr(module.cli, "invoke", lambda *_, _result=result, **__: _result)
        with pytest.raises(SystemExit) as caught:
            module.main(["inspect"])
        assert caught.value.code == code


def test_help_stands_under_headings_everyday_first():
    @click.command(cls=GroupedCommand)
    @click.argument("name")
    @option("--gap", type=LengthType("auto"), heading=INPUT, help="Gap.")
    @option("--size", type=LengthType(), help="Size.")
    def command(name, gap, size):
        """Do it."""
        click.echo(repr((gap, size)))

    text = CliRunner().invoke(command, ["--help"]).output
    assert text.index("Everyday options") < text.index("--size") < text.index(INPUT) < text.index("--gap LEN|auto")
    assert "\n  NAME" not in text
    given = CliRunner().invoke(command, ["x", "--gap", "auto", "--size", "2mm"]).output
    assert given == f"{('auto', Length(2.0, unit_from_name('mm')))!r}\n"


def test_tables_are_drawn_on_a_terminal_and_plain_elsewhere(monkeypatch, capsys):
    from converter.console import print_table

    print_table(("name", "n"), [("a", "10"), ("bcdef", "2")], right=("n",))
    assert capsys.readouterr().out == "name    n\na      10\nbcdef   2\n"
    monkeypatch.setattr(sys.stdout, "isatty", lambda: True)
    print_table(("name", "n"), [("[b]a", "10")], right=("n",))
    drawn = capsys.readouterr().out
    assert "[b]a" in drawn
    assert "─" in drawn
