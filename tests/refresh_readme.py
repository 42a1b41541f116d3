"""Run the examples of README.md and put what they print now in the place of what the page shows.

Run from the project folder after a change that shows in the printed output: python -m tests.refresh_readme
"""

import tempfile
from pathlib import Path

from tests.readme_examples import README, agrees, examples, run_all


def main():
    text = README.read_text(encoding="utf-8")
    found = examples(text)
    with tempfile.TemporaryDirectory() as folder:
        printed = run_all(found, Path(folder))
    changed = 0
    for example, lines in reversed(list(zip(found, printed, strict=True))):  # from the end: places before stay right
        text = text[: example.start] + "".join(line + "\n" for line in lines) + text[example.end :]
        same = len(lines) == len(example.shown) and all(map(agrees, example.shown, lines))
        changed += not same
        if not same:
            print(f"changed: {example.command}")
    README.write_text(text, encoding="utf-8")
    print(f"{len(found)} examples run, {changed} changed beyond rounding")


if __name__ == "__main__":
    main()
