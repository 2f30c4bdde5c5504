"""Run the commands in the README of this folder again and put in what they say.

In the README a line that starts with ``$ `` inside a ``console`` block is a command; what it
prints and its exit code follow it. Run ``python examples/messy/make_readme.py`` after a change.
"""

from __future__ import annotations

import contextlib
import re
import shlex
from pathlib import Path

from click.testing import CliRunner

from robustrm.cli import main as command_line

HERE = Path(__file__).parent
BLOCK = re.compile(
    r"```console\n\$ (?P<command>(?:[^\n]*\\\n)*[^\n]*)\n(?P<output>.*?)```", re.DOTALL
)


def output_of(command: str) -> str:
    """Return what a command prints in this folder, and its exit code where it is not 0."""
    words = shlex.split(command.replace("\\\n", " "))
    with contextlib.chdir(HERE):
        result = CliRunner().invoke(command_line, words[1:], prog_name=words[0])
    code = f"\n(exit code {result.exit_code})\n" if result.exit_code else ""
    return result.output + code


def renewed(text: str) -> str:
    """Return the text of the README with the output of every command replaced."""

    def block(match: re.Match[str]) -> str:
        command = match["command"]
        return f"```console\n$ {command}\n{output_of(command)}```"

    return BLOCK.sub(block, text)


def main() -> None:
    readme = HERE / "README.md"
    text = readme.read_text(encoding="utf-8")
    readme.write_text(renewed(text), encoding="utf-8", newline="\n")
    print(f"ran {len(BLOCK.findall(text))} commands")


if __name__ == "__main__":
    main()
