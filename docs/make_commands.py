"""Write docs/command-line.md from the commands themselves.

Run from anywhere: ``python docs/make_commands.py``. tests/docs compares the committed page with what this gives.
"""

from __future__ import annotations

import inspect
from pathlib import Path
from typing import Any

from stresskit.cli import app

PAGE = Path(__file__).with_name("command-line.md")
HEAD = """# Command line

<!-- Written by docs/make_commands.py from stresskit/cli.py and its neighbours. -->

Every command shows its options and an example with `--help`. A first study of your own begins with [new](#new), the invented bank with
[demo](#demo).

## What all commands share

- **The result goes to stdout**, progress with the remaining time to stderr, and only when stderr is a terminal. So `stresskit run ... > result.txt`
  keeps the result alone.
- **`--json`** prints the result as JSON instead of tables: full digits, `null` where a value is missing or not finite.
- **Tables fit the terminal.** Amounts have thousands separators, probabilities and rates are percent. What does not fit at 80 columns is left out
  with a line that says so and names the file that has it, or comes in a second part below.
- **Colour** is off when stdout is not a terminal, and when the environment variable `NO_COLOR` is set.
- **Names from data are shown as characters.** An escape sequence in a segment's name appears as `\\x1b[31m` and does nothing; `[red]` stays `[red]`.
- **Nothing is overwritten** unless `--replace` is given, and then only a folder that stresskit wrote itself. Folders appear whole or not at all.
- **Exit codes**: 0 done, 1 a bug in stresskit, 2 usage, 3 study or scenario text, 4 data, 5 numerics, 6 a check failed, 130 interrupted
  ([errors](errors.md)). An error is a line or two without a traceback, with file:line:column where text is wrong, the nearest name that exists, and
  what to do; `--traceback` shows where in the program it arose.

Let the shell complete commands and options:

```
stresskit completion bash > ~/.local/share/bash-completion/completions/stresskit
stresskit completion zsh > ~/.zsh/completions/_stresskit
stresskit completion fish > ~/.config/fish/completions/stresskit.fish
```
"""


def page() -> str:
    """The whole page."""
    names = [name for name in app.resolved_commands() if not name.startswith("-")]
    rows = [f"| [{name}](#{name}) | {_first(app[name].help)} |" for name in names]
    table = "\n".join(["| command | what it does |", "|---|---|", *rows])
    return "\n".join([HEAD, "## All commands", "", table, "", *(_command(name) for name in names)])


def _first(text: str | None) -> str:
    """The first paragraph in one line."""
    return " ".join((text or "").strip().split("\n\n")[0].split()).replace("|", "\\|")


def _command(name: str) -> str:
    command = app[name]
    examples = [
        line.split(": ", 1)[-1] for line in (command.help_epilogue or "").splitlines() if "stresskit " in line
    ]
    rows = [_option(argument) for argument in command.assemble_argument_collection() if argument.show]
    parts = [f"## {name}", "", _first(command.help), "", "```", *examples, "```", ""]
    return "\n".join([*parts, "| argument | meaning | default |", "|---|---|---|", *rows, ""])


def _option(argument: Any) -> str:
    default = argument.field_info.default
    shown = (
        ""
        if default in (inspect.Parameter.empty, None, ()) or argument.parameter.show_default is False
        else f"`{default}`"
    )
    words = "needed" if argument.required else {"`True`": "yes", "`False`": "no"}.get(shown, shown)
    names = ", ".join(f"`{n}`" for n in argument.names)
    return f"| {names} | {' '.join((argument.parameter.help or '').split())} | {words} |".replace("<", "&lt;")


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8", newline="\n")
