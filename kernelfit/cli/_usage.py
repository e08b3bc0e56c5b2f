"""Calls that the command line cannot take, in plain lines: what is wrong, and what to type instead."""

from __future__ import annotations

import re
from difflib import get_close_matches
from typing import Any

import typer
from typer.core import TyperCommand

from kernelfit.cli._parsing import ALIKE

# The option parser lives in a package of its own or inside typer, depending on typer's version; its root of
# wrong calls is reached through the one class that typer has always exported.
USAGE_ERROR: type[Exception] = typer.BadParameter.__mro__[1]

# Messages of the package name arguments as Python has them; these are the options of the same meaning.
OPTIONS = {
    "time_unit": "--time-unit",
    "sampling_rate_hz": "--sampling-rate-hz",
    "length_unit": "--length-unit",
    "decimal": "--decimal",
    "drop_duplicates": "--drop-duplicates",
    "min_spikes": "--min-spikes",
    "source_only": "--source-only",
    "kernel": "--kernel",
    "n_basis": "--spline-basis",
    "smoothing": "--smoothing",
    "bin_width": "--bin-ms (in ms)",
    "leak_rate": "--leak-rate",
    "max_distance": "--max-distance-um",
    "same_site": "--same-site",
    "after_spike": "--after-spike",
    "warm_up_s": "--warm-up-s",
    "covariance": "--intervals",
}
_WORDS_TOO = {"decimal", "kernel", "covariance"}  # arguments only where a value follows
_NAMED = re.compile(r"(?<![-\w])(" + "|".join(OPTIONS) + r")\b(?!-)(\s?=)?")


class PlainUsage(TyperCommand):
    """A command whose usage line reads as it is typed: the arguments, then the options."""

    def collect_usage_pieces(self, ctx: Any) -> list[str]:
        """Arguments by their placeholders, without the braces that typer puts around them."""
        return [*_arguments(self), self.options_metavar or "[OPTIONS]"]


def option_lines(message: str) -> list[str]:
    """How the arguments that a message names are typed, where it does not say so itself: one line, or none."""
    named = [
        name
        for name, given in _NAMED.findall(message)
        if (given or name not in _WORDS_TOO) and OPTIONS[name].split()[0] not in message
    ]
    if not named:
        return []
    return [f"On the command line: {', '.join(f'{name} is {OPTIONS[name]}' for name in dict.fromkeys(named))}."]


def usage_lines(error: Exception, typed: str) -> list[str]:
    """What is wrong and how to find what is right; `typed` is the command as typed, "kernelfit fit"."""
    context: Any = getattr(error, "ctx", None)
    command = typed if context is None else str(context.command_path)
    return [f"{command}: {line}" for line in _problem(error, context)] + [f"All options: {command} --help"]


def _problem(error: Any, context: Any) -> list[str]:
    kind = type(error).__name__
    message = str(error.message or "").strip()
    parameter = getattr(error, "param", None)
    if kind == "MissingParameter" and parameter is not None:
        return [f"{_shown(parameter)} is missing. Type: {_synopsis(context)}"]
    if kind == "NoSuchOption":
        return [f"there is no option {error.option_name}. {_closest(error.option_name, _options(context))}"]
    if kind == "BadOptionUsage":
        return [f"{error.option_name} needs a value after it. See what it takes in the list of options."]
    if parameter is not None:
        return [f"{_shown(parameter)}: {_sentence(message)} Give another value."]
    commands = _commands(context)
    if message.startswith("No such command") and commands:
        typed = message.removeprefix("No such command").split("'")[1]
        close = get_close_matches(typed, commands, n=1, cutoff=ALIKE)
        meant = f" Did you mean {close[0]}?" if close else ""
        return [f"there is no command {typed!r}.{meant} The commands are {', '.join(commands)}."]
    if commands:
        return [f"a command is missing. The commands are {', '.join(commands)}; to begin: kernelfit demo"]
    if "unexpected extra argument" in message:
        extra = message[message.rfind("(") + 1 : message.rfind(")")]
        return [f"too many arguments: {extra}. Type: {_synopsis(context)}. A name with blanks needs quotes."]
    return [_sentence(message)]


def _shown(parameter: Any) -> str:
    """An argument as its placeholder, an option as it is typed."""
    if parameter.param_type_name == "argument":
        return str(parameter.metavar or parameter.name)
    return str(max(parameter.opts, key=len))


def _sentence(message: str) -> str:
    return message if message.endswith(".") else f"{message}."


def _synopsis(context: Any) -> str:
    return " ".join([str(context.command_path), *_arguments(context.command)])


def _arguments(command: Any) -> list[str]:
    return [_shown(p) for p in command.params if p.param_type_name == "argument"]


def _options(context: Any) -> list[str]:
    if context is None:
        return []
    return [name for p in context.command.params if p.param_type_name == "option" for name in p.opts]


def _commands(context: Any) -> list[str]:
    return list(getattr(getattr(context, "command", None), "commands", ()))


def _closest(typed: str, known: list[str]) -> str:
    close = get_close_matches(typed, known, n=1, cutoff=ALIKE)
    return f"Did you mean {close[0]}?" if close else "Leave it out, or look for the right one."
