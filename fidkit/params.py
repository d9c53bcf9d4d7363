"""The step mechanism: a plain function whose signature says everything else.

Only the standard library is used here, so that this module can sit at the bottom of the house.
"""

from __future__ import annotations

import functools
import inspect
import math
import numbers
import types
import typing
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Annotated, Any, Literal, TypeVar, Union

__all__ = [
    "STEPS",
    "Along",
    "FidkitError",
    "Gives",
    "Parameter",
    "ParameterError",
    "Range",
    "Slider",
    "Step",
    "Together",
    "Unit",
    "find_step",
    "step",
]

Value = float | int | bool | str | tuple[float, float] | None
Function = TypeVar("Function", bound=Callable[..., Any])


class FidkitError(ValueError):
    """A mistake that the user can mend; its text says what, where, allowed, got and remedy."""


class ParameterError(FidkitError):
    """A parameter of a step or measurement that is not allowed."""


@dataclass(frozen=True)
class Unit:
    """The unit of a number, as text."""

    text: str


@dataclass(frozen=True)
class Range:
    """What physics allows: outside it the call raises. `above` shuts out the lower limit itself."""

    low: float = -math.inf
    high: float = math.inf
    above: bool = False

    def __contains__(self, value: float) -> bool:
        if not math.isfinite(value):
            return False
        return (value > self.low if self.above else value >= self.low) and value <= self.high

    def __str__(self) -> str:
        opening = "(" if self.above or self.low == -math.inf else "["
        closing = ")" if self.high == math.inf else "]"
        return f"{opening}{self.low:.15g}, {self.high:.15g}{closing}"


@dataclass(frozen=True)
class Slider:
    """How far a control reaches on the screen; it forbids nothing."""

    low: float
    high: float
    step: float


@dataclass(frozen=True)
class Along:
    """A position on an axis of the signal: the axis gives the limits."""

    dimension: str


@dataclass(frozen=True)
class Gives:
    """Marks the return annotation of a step that turns one kind of signal into the other."""

    kind: Literal["fid", "spectrum"]


@dataclass(frozen=True)
class Together:
    """Marks the signal of a step that looks at several records at once: they must not be parted."""


@dataclass(frozen=True)
class Parameter:
    """One keyword parameter of a step, read from its signature."""

    name: str
    kind: Literal["number", "whole number", "switch", "choice", "pair"]
    default: Value
    optional: bool = False
    choices: tuple[str, ...] = ()
    unit: str = ""
    range: Range = Range()
    slider: Slider | None = None
    along: str = ""

    def __str__(self) -> str:
        """The one phrase for errors, help, tooltips and docs."""
        if self.kind == "switch":
            phrase = "True or False"
        elif self.kind == "choice":
            phrase = " or ".join(repr(choice) for choice in self.choices)
        else:
            noun = {"number": "a number", "whole number": "a whole number"}.get(
                self.kind, "a pair (low, high) of numbers"
            )
            phrase = f"{noun} in {self.range}" + (f" {self.unit}" if self.unit else "")
            if self.along:
                phrase += f" within the {self.along} axis"
        return phrase + (", or None" if self.optional else "")

    def check(self, value: object, where: str) -> Value:
        """Return `value` as plain Python, or raise `ParameterError`."""

        def refuse() -> ParameterError:
            return ParameterError(f"{where}: {self.name} must be {self}; got {shown(value)}")

        if value is None:
            if self.optional:
                return None
            raise refuse()
        if self.kind == "switch":
            # numpy's bool is no Python bool, but its name and its value are
            if type(value).__name__ not in ("bool", "bool_"):
                raise refuse()
            return bool(value)
        if self.kind == "choice":
            if not isinstance(value, str) or value not in self.choices:
                raise refuse()
            return str(value)
        if self.kind == "pair":
            if not isinstance(value, tuple | list) or len(value) != 2:
                raise refuse()
            low, high = (self._number(part) for part in value)
            if low is None or high is None or not low < high:
                raise refuse()
            return (float(low), float(high))
        number = self._number(value)
        if number is None:
            raise refuse()
        return number

    def _number(self, value: object) -> float | int | None:
        wanted = numbers.Integral if self.kind == "whole number" else numbers.Real
        if not isinstance(value, wanted) or type(value).__name__ in ("bool", "bool_"):
            return None
        try:
            # as a float first: what does not fit into one is out of every range
            as_float = float(value)
        except OverflowError:
            return None
        if as_float not in self.range:
            return None
        return int(value) if self.kind == "whole number" else as_float  # type: ignore[call-overload]

    def check_along(self, value: Value, signal: Any, where: str) -> None:
        """Raise where a position lies outside the axis it is a position on."""
        if not self.along or value is None or self.along not in signal.coords:
            return
        axis = signal.coords[self.along]
        low, high = float(axis.min()), float(axis.max())
        for part in value if isinstance(value, tuple) else (value,):
            if not low <= float(part) <= high:
                raise ParameterError(
                    f"{where}: {self.name} must lie within the {self.along} axis "
                    f"[{low:g}, {high:g}] {self.unit}; got {shown(part)}"
                )


@dataclass(frozen=True)
class Step:
    """A registered step: the function and all that its signature and docstring say."""

    name: str
    function: Callable[..., Any]
    parameters: Mapping[str, Parameter]
    takes: Literal["fid", "spectrum", "signal"]
    gives: Literal["fid", "spectrum", "signal"]
    together: bool
    room: str
    summary: str

    def check(self, given: Mapping[str, object]) -> dict[str, Value]:
        """Return the given arguments checked, as plain Python, in the order of the signature."""
        for name in given:
            if name not in self.parameters:
                known = ", ".join(self.parameters) or "none"
                raise ParameterError(
                    f"{self.name}: there is no parameter {name!r}; its parameters are: {known}"
                )
        return {
            name: parameter.check(given[name], self.name)
            for name, parameter in self.parameters.items()
            if name in given
        }

    def call_text(self, arguments: Mapping[str, Value], signal: str = "") -> str:
        """The call as Python text, literals only."""
        parts = [signal] if signal else []
        parts += [f"{name}={value!r}" for name, value in arguments.items()]
        return f"{self.name}({', '.join(parts)})"


STEPS: dict[str, Step] = {}
"""Every registered step by name, in the order of definition."""


#: What else a signal must be. `fidkit.signals` adds its check here, so that this module needs no
#: array library.
SIGNAL_CHECKS: list[Callable[[Any, str], None]] = []


def shown(value: object) -> str:
    """A value as one short line for an error message."""
    try:
        text = " ".join(repr(value).split())
    except Exception:  # a number of more digits than Python prints, or a broken __repr__
        text = f"a {type(value).__name__} that cannot be shown"
    return text if len(text) <= 80 else f"{text[:76]} ..."


def find_step(name: str) -> Step:
    """Return the step called `name`, or raise `FidkitError` with the nearest names."""
    if not isinstance(name, str):
        raise FidkitError(f"a step is called by its name, a text; got {shown(name)}")
    if name in STEPS:
        return STEPS[name]
    import difflib

    near = difflib.get_close_matches(name, STEPS, n=3)
    hint = f"did you mean {' or '.join(near)}?" if near else "`fidkit steps` lists them"
    raise FidkitError(f"there is no step {shown(name)}; {hint}")


def step(function: Function) -> Function:
    """Register a function as a step: check its arguments and write its line of history.

    The function takes the signal first (called `fid`, `spectrum`, or `signal` where either will
    do) and everything else by keyword, with a default. It gives the same kind back, unless its
    return annotation carries `Gives`. Records along leading dimensions must not influence each
    other, unless the annotation of the signal carries `Together`.

    Raises
    ------
    TypeError
        When the module is imported, if a parameter is of no kind that a control, a command line
        and a saved chain can hold.
    """
    spec = _read(function)

    @functools.wraps(function)
    def checked(*args: Any, **given: Any) -> Any:
        if not args and spec.takes in given:
            args = (given.pop(spec.takes),)
        if len(args) != 1:
            raise ParameterError(
                f"{spec.name}: takes one {spec.takes} and keywords; got {len(args)} positional arguments"
            )
        signal = args[0]
        _check_signal(spec, signal)
        arguments = spec.check(given)
        for name, value in arguments.items():
            spec.parameters[name].check_along(value, signal, spec.name)
        try:
            result = function(signal, **arguments)
        except MemoryError as error:
            raise FidkitError(
                f"{spec.name}: the computer has not enough memory for this ({error or 'no details'}); "
                "take fewer points or fewer records at a time"
            ) from None
        if result is signal:
            result = result.copy(deep=False)
        before = signal.attrs.get("history", "")
        line = spec.call_text(arguments)
        result.attrs["history"] = f"{before}\n{line}" if before else line
        return result

    if spec.name in STEPS and STEPS[spec.name].room != spec.room:
        raise TypeError(
            f"step {spec.name}: {STEPS[spec.name].room} has a step of that name already"
        )
    STEPS[spec.name] = replace(spec, function=checked)
    return typing.cast(Function, checked)


def _check_signal(spec: Step, signal: Any) -> None:
    dims = getattr(signal, "dims", None)
    if not dims or not hasattr(signal, "attrs") or hasattr(signal, "data_vars"):
        raise FidkitError(
            f"{spec.name}: {spec.takes} must be a signal as fidkit.read or fidkit.from_array "
            f"gives it; got {type(signal).__name__}"
        )
    wanted = {"fid": ("time",), "spectrum": ("frequency",), "signal": ("time", "frequency")}
    if dims[-1] not in wanted[spec.takes]:
        remedy = {
            "fid": "take the step before fourier_transform, or apply inverse_transform first",
            "spectrum": "apply fourier_transform first",
            "signal": "put that dimension last with .transpose",
        }[spec.takes]
        raise FidkitError(
            f"{spec.name}: the last dimension must be {' or '.join(wanted[spec.takes])}; "
            f"got {dims[-1]!r}; {remedy}"
        )
    for check in SIGNAL_CHECKS:
        check(signal, spec.name)


def _read(function: Callable[..., Any]) -> Step:
    name = function.__name__
    signature = inspect.signature(function)
    hints = typing.get_type_hints(function, include_extras=True)
    first, *rest = signature.parameters.values()
    if first.name not in ("fid", "spectrum", "signal"):
        raise TypeError(f"step {name}: call the first parameter fid, spectrum or signal")
    parameters = {}
    for item in rest:
        if item.kind is not inspect.Parameter.KEYWORD_ONLY or item.default is item.empty:
            raise TypeError(f"step {name}: {item.name} must be keyword-only and have a default")
        parameters[item.name] = _parameter(name, item.name, hints[item.name], item.default)
    marks = getattr(hints.get("return"), "__metadata__", ())
    gives: Any = next((mark.kind for mark in marks if isinstance(mark, Gives)), first.name)
    summary = (inspect.getdoc(function) or "").split("\n\n")[0].replace("\n", " ")
    if not summary:
        raise TypeError(f"step {name}: needs a docstring")
    together = any(
        isinstance(mark, Together) for mark in getattr(hints.get(first.name), "__metadata__", ())
    )
    takes: Any = first.name
    return Step(name, function, parameters, takes, gives, together, function.__module__, summary)


def _parameter(step_name: str, name: str, hint: Any, default: Any) -> Parameter:
    marks: list[Any] = []
    optional = False
    while True:
        origin = typing.get_origin(hint)
        if origin is Annotated:
            hint, *more = typing.get_args(hint)
            marks += more
        elif origin in (Union, types.UnionType):
            inner = [part for part in typing.get_args(hint) if part is not type(None)]
            if len(inner) != 1:
                break
            hint, optional = inner[0], True
        else:
            break
    choices: tuple[str, ...] = ()
    kind: Any
    if hint is bool:
        kind = "switch"
    elif hint is int:
        kind = "whole number"
    elif hint is float:
        kind = "number"
    elif hint == tuple[float, float]:
        kind = "pair"
    elif typing.get_origin(hint) is Literal and all(
        isinstance(choice, str) for choice in typing.get_args(hint)
    ):
        kind, choices = "choice", typing.get_args(hint)
    else:
        raise TypeError(
            f"step {step_name}: {name} must be float, int, bool, Literal of strings or "
            f"tuple[float, float], each optionally None; got {hint!r}"
        )

    def mark(cls: type) -> Any:
        return next((item for item in marks if isinstance(item, cls)), None)

    unit, along = mark(Unit), mark(Along)
    parameter = Parameter(
        name=name,
        kind=kind,
        default=None,
        optional=optional,
        choices=choices,
        unit=unit.text if unit else "",
        range=mark(Range) or Range(),
        slider=mark(Slider),
        along=along.dimension if along else "",
    )
    try:
        checked = parameter.check(default, step_name)
    except ParameterError as error:
        raise TypeError(f"default of {error}") from None
    return replace(parameter, default=checked)
