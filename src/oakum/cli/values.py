"""The usual values of options, made without typer's help.

typer leaves that to pydantic, whose import alone takes longer than numpy's, and longer than the check of a
small file. Paths, texts and what has a parser of its own are made here; numbers and choices, which say more
when they are wrong, go typer's way.
"""

from functools import partial
from pathlib import Path
from typing import Any, get_args, get_origin

from typer.core import TyperArgument, TyperCommand, TyperGroup, TyperOption

Parameter = TyperArgument | TyperOption


class _OwnValues:
    """What commands and groups have in common: their parameters are read by `_process_value`."""

    def get_params(self, context: Any) -> list[Any]:
        parameters: list[Any] = super().get_params(context)  # type: ignore[misc]
        for parameter in parameters:
            if "process_value" not in vars(parameter):
                parameter.process_value = partial(_process_value, parameter, parameter.process_value)
        return parameters


class Command(_OwnValues, TyperCommand):
    """A command of the application."""


class Group(_OwnValues, TyperGroup):
    """The application itself."""


def _process_value(parameter: Parameter, usual: Any, context: Any, value: Any) -> Any:
    """The value of a parameter from what stands on the command line; `usual` is typer's way to make it."""
    several = parameter.multiple or parameter.nargs == -1
    make = _maker(parameter)
    if value is None and not parameter.required:
        made: Any = () if several else None
    elif value and make is not None:
        made = [make(item) for item in value] if several else make(value)
    else:
        return usual(context, value)
    return made if parameter.callback is None else parameter.callback(context, parameter, made)


def _maker(parameter: Parameter) -> Any:
    """What makes a value from a text; None where that is left to typer."""
    kind: Any = parameter.type_descriptor.annotation
    if get_origin(kind) is list:
        (kind,) = get_args(kind)
    parser = parameter.type_descriptor.parameter_info.parser
    return parser or (kind if kind in (Path, str) else None)
