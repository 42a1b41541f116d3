"""Damaged files: a result or one clear error, and the input unchanged."""

import random

import pytest

from converter.drawing import read_drawing, replace, save
from converter.errors import ConverterError
from converter.jobs.inspect import inspect_drawing
from tests.test_drawing_write import busy_document

WORDS = [b"nan", b"inf", b"1e300", b"1e-300", b"-1", b"0", b"99999999", b"", b" 10", b"LINE", b"SPLINE", "é".encode()]


def damage(data, rng):
    """Change bytes, cut the end off, take a piece out, or put words in the place of lines."""
    data, kind = bytearray(data), rng.randrange(4)
    if kind == 0:
        for _ in range(rng.randrange(1, 30)):
            data[rng.randrange(len(data))] = rng.randrange(256)
    elif kind == 1:
        del data[rng.randrange(len(data)) :]
    elif kind == 2:
        start = rng.randrange(len(data))
        del data[start : start + rng.randrange(1, 3000)]
    else:
        lines = bytes(data).split(b"\n")
        values = range(1, len(lines), 2) if rng.random() < 0.7 else range(len(lines))  # group codes stay, mostly
        for _ in range(rng.randrange(1, 40)):
            lines[rng.choice(values)] = rng.choice(WORDS)
        data = bytearray(b"\n".join(lines))
    return bytes(data)


@pytest.mark.parametrize("version", ["R12", "R2000", "R2018"])
@pytest.mark.parametrize("fmt", ["asc", "bin"])
def test_every_damaged_file_gives_a_result_or_one_line(tmp_path, version, fmt):
    source, output = tmp_path / "in.dxf", tmp_path / "out.dxf"
    busy_document(version).saveas(source, fmt=fmt)
    whole, rng = source.read_bytes(), random.Random(f"{version}{fmt}")
    outcomes = {"result": 0, "error": 0}
    for _ in range(12):
        data = damage(whole, rng)
        source.write_bytes(data)
        try:
            record = inspect_drawing(source)
            drawing = read_drawing(source)
            for profile in drawing.profiles:
                if not profile.curved:
                    replace(drawing, profile, profile.parts[0])
            save(drawing, output, force=True)
        except ConverterError as error:
            outcomes["error"] += 1
            text = str(error)
        else:
            outcomes["result"] += 1
            text = record.reason
            assert output.stat().st_size > 0
        assert text
        assert "\n" not in text
        assert source.read_bytes() == data
    assert outcomes["error"] > 0  # the damage is real
