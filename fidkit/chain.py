"""Chains: a row of steps, kept as a Python function that anyone can read and run.

A chain that is loaded is parsed, never executed: its names are looked up in the table of steps, its
values are read as literals and checked, and the text is made anew and must mean the same.
"""

from __future__ import annotations

import ast
import functools
import itertools
import os
import warnings
from collections.abc import Callable, Hashable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np
import xarray as xr

from fidkit import signals
from fidkit.files import write_whole
from fidkit.params import FidkitError, Step, Value, find_step, shown
from fidkit.threads import in_threads
from fidkit.version import __version__

__all__ = ["Call", "Chain", "chain_of"]

#: Bounds on a chain that comes from outside, in characters and levels of its syntax tree: a saved
#: chain has ten of these.
LARGEST_TEXT = 64_000
DEEPEST_NESTING = 20
MOST_STEPS = 200

#: Points handled at once when a chain runs over many records: few enough that what one step leaves
#: is still in the cache for the next, enough that the bookkeeping of a step does not count.
BLOCK_POINTS = 2**19


@dataclass(frozen=True)
class Call:
    """One step with its arguments, checked when it is made.

    Parameters
    ----------
    step : str
        Name of a registered step.
    arguments : mapping
        Values by parameter name.

    Raises
    ------
    FidkitError
        For an unknown step or parameter or a value that is not allowed.
    """

    step: str
    arguments: Mapping[str, Value]

    def __init__(self, step: str, arguments: Mapping[str, object] | None = None, /, **more: object):
        found = find_step(step)
        object.__setattr__(self, "step", found.name)
        given = MappingProxyType(found.check({**(arguments or {}), **more}))
        object.__setattr__(self, "arguments", given)

    def __hash__(self) -> int:
        return hash((self.step, tuple(self.arguments.items())))

    @property
    def spec(self) -> Step:
        """What the table of steps says of this one."""
        return find_step(self.step)

    def __str__(self) -> str:
        return self.spec.call_text(self.arguments)


class Chain:
    """A row of steps that can be called on a signal, saved as text, and loaded back.

    Parameters
    ----------
    calls : iterable of Call or str
        The steps in order; a bare name is a step with its defaults.
    title : str
        One line saying what the chain is for.

    Raises
    ------
    FidkitError
        If a step cannot follow the one before it.

    Examples
    --------
    >>> chain = Chain([Call("apodize_exponential", broadening=1.5), "fourier_transform"])
    >>> spectrum = chain(fid)  # doctest: +SKIP
    """

    def __init__(self, calls: Iterable[Call | str] = (), title: str = ""):
        if isinstance(calls, str) or not isinstance(calls, Iterable):
            raise FidkitError(f"a chain is a list of calls and names of steps; got {shown(calls)}")
        self.calls = tuple(call if isinstance(call, Call) else Call(call) for call in calls)
        # what cannot be printed could not be read back either
        self.title = "".join(c for c in " ".join(title.split()) if c.isprintable())[:200]
        if len(self.calls) > MOST_STEPS:
            raise FidkitError(f"a chain holds at most {MOST_STEPS} steps; got {len(self.calls)}")
        self.takes = next((c.spec.takes for c in self.calls if c.spec.takes != "signal"), "fid")
        kind: str = self.takes
        for number, call in enumerate(self.calls, 1):
            spec = call.spec
            if spec.takes not in ("signal", kind):
                raise FidkitError(
                    f"step {number} of the chain, {call.step}, takes a {spec.takes}, but a {kind} "
                    f"comes to it; put {'fourier_transform' if kind == 'fid' else 'inverse_transform'}"
                    " before it or move it"
                )
            kind = kind if spec.gives == "signal" else spec.gives
        self.gives = kind

    def __call__(self, signal: xr.DataArray) -> xr.DataArray:
        """Take every step in turn.

        Parameters
        ----------
        signal : xarray.DataArray
            FID, or spectrum for a chain that begins with one; leading dimensions are carried
            through.

        Returns
        -------
        xarray.DataArray
            What the last step gives, its ``history`` telling the whole way.

        Raises
        ------
        FidkitError
            What a step raises, with its number in the chain.
        """
        signals.check_signal(signal, "chain")
        for first, last in self._stretches():
            if signal.chunks is not None and not self.calls[first].spec.together:
                signal = self._lazily(signal, first, last)
            else:
                signal = self._in_blocks(signal, first, last)
        return signal

    def _stretches(self) -> Iterator[tuple[int, int]]:
        """Runs of steps that treat every record alone; each step that does not, by itself."""
        first = 0
        for together, calls in itertools.groupby(self.calls, lambda call: call.spec.together):
            length = len(tuple(calls))
            for size in [1] * length if together else [length]:
                yield first, first + size
                first += size

    def _run(self, signal: xr.DataArray, first: int, last: int) -> xr.DataArray:
        for number, call in enumerate(self.calls[first:last], first + 1):
            try:
                signal = call.spec.function(signal, **call.arguments)
            except FidkitError as error:
                raise type(error)(f"step {number} of the chain: {error}") from error
        return signal

    def _in_blocks(self, signal: xr.DataArray, first: int, last: int) -> xr.DataArray:
        """Take a stretch of steps; many records go in blocks that fit the cache, on threads."""
        together = self.calls[first].spec.together
        leading = {name: signal.sizes[name] for name in signal.dims[:-1]}
        dimension = max(leading, key=lambda name: leading[name], default=None)
        if together or dimension is None or signal.size < 2 * BLOCK_POINTS:
            return self._run(signal, first, last)
        rows = max(1, BLOCK_POINTS * leading[dimension] // signal.size)
        starts = range(0, leading[dimension], rows)

        def block(start: int) -> xr.DataArray:
            return self._run(signal.isel({dimension: slice(start, start + rows)}), first, last)

        # the first block says what the whole will look like
        head = block(0)
        axis = head.dims.index(dimension)
        values = np.empty(
            tuple(
                signal.sizes.get(name, head.sizes[name]) if name == dimension else head.sizes[name]
                for name in head.dims
            ),
            head.dtype,
        )

        def keep(start: int, part: xr.DataArray) -> dict[Hashable, Any]:
            place = [slice(None)] * values.ndim
            place[axis] = slice(start, start + rows)
            values[tuple(place)] = part.values
            return {
                name: coordinate.variable
                for name, coordinate in part.coords.items()
                if dimension in coordinate.dims
            }

        found = [keep(0, head)]
        found += in_threads(lambda start: keep(start, block(start)), starts[1:])
        coords = {name: value for name, value in head.coords.items() if dimension not in value.dims}
        for name in found[0]:
            coords[name] = xr.concat(
                [xr.DataArray(part[name]) for part in found], dimension
            ).variable
        return xr.DataArray(values, dims=head.dims, coords=coords, name=head.name, attrs=head.attrs)

    def _lazily(self, signal: xr.DataArray, first: int, last: int) -> xr.DataArray:
        """The same for an array that dask holds: nothing is computed yet."""
        signal = signal.chunk({signal.dims[-1]: -1})
        leading = signal.dims[:-1]
        one = self._run(signal.isel({name: slice(0, 1) for name in leading}).compute(), first, last)
        wanted = {name: signal.chunksizes[name] for name in leading}
        template = one.isel({name: [0] * signal.sizes[name] for name in leading})
        template = template.assign_coords(
            {name: signal[name] for name in leading if name in signal.coords}
        )
        template = template.chunk({**wanted, one.dims[-1]: -1})
        return xr.map_blocks(self._run, signal, args=(first, last), template=template)

    def __iter__(self) -> Iterator[Call]:
        return iter(self.calls)

    def __len__(self) -> int:
        return len(self.calls)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Chain) and self.calls == other.calls

    def __hash__(self) -> int:
        return hash(self.calls)

    def __repr__(self) -> str:
        return f"Chain([{', '.join(str(call) for call in self.calls)}])"

    @property
    def source(self) -> str:
        """The chain as the Python function that it is."""
        title = self.title.replace("\\", "/").replace('"', "'")
        head = f"Saved by fidkit {__version__}" + (f": {title}" if title else ".")
        lines = [f'"""{head}"""', "", "import fidkit as fk", "", "", f"def process({self.takes}):"]
        kind: str = self.takes
        for call in self.calls:
            spec = call.spec
            after = kind if spec.gives == "signal" else spec.gives
            units = ", ".join(
                f"{name} [{spec.parameters[name].unit}]"
                for name, value in call.arguments.items()
                if spec.parameters[name].unit and value is not None
            )
            text = f"    {after} = fk.{spec.call_text(call.arguments, kind)}"
            lines.append(text + (f"  # {units}" if units else ""))
            kind = after
        lines.append(f"    return {kind}")
        return "\n".join(lines) + "\n"

    def save(self, path: str | os.PathLike[str]) -> Path:
        """Write the chain as a Python file, whole or not at all.

        Parameters
        ----------
        path : path-like
            File to write; one that is there already is replaced.

        Returns
        -------
        pathlib.Path
            The file.

        Raises
        ------
        OSError
            If it cannot be written.
        """
        return write_whole(path, self.source.encode())

    @classmethod
    def load(cls, path: str | os.PathLike[str]) -> Chain:
        """Read a chain from a file; the file is parsed, never executed.

        Parameters
        ----------
        path : path-like
            File as `save` writes it.

        Returns
        -------
        Chain
            The chain.

        Raises
        ------
        FidkitError
            If the file holds anything but a chain of known steps with allowed values.
        OSError
            If it cannot be read.
        """
        path = Path(path)
        with path.open("rb") as file:
            raw = file.read(LARGEST_TEXT + 1)
        try:
            text = raw.decode("utf-8-sig")
        except UnicodeDecodeError:
            raise FidkitError(
                f"{path.name}: a chain is a text file in UTF-8; this is none"
            ) from None
        return cls.from_source(text, path.name)

    @classmethod
    def from_source(cls, text: str, name: str = "chain") -> Chain:
        """Read a chain from its text; see `load`.

        Parameters
        ----------
        text : str
            The Python function, as `source` gives it.
        name : str
            What to call it in errors.

        Returns
        -------
        Chain
            The chain.

        Raises
        ------
        FidkitError
            If the text holds anything but a chain of known steps with allowed values.
        """

        refuse = functools.partial(_refusal, name)
        body, title = _parsed(text, refuse)
        if not body or ast.dump(body[0]) != ast.dump(ast.parse("import fidkit as fk").body[0]):
            raise refuse("expected `import fidkit as fk`", body[0] if body else None)
        if len(body) != 2 or not isinstance(body[1], ast.FunctionDef) or body[1].name != "process":
            raise refuse("expected only def process(...)", body[1] if len(body) > 1 else None)
        *statements, last = body[1].body
        if not isinstance(last, ast.Return):
            raise refuse("expected a return at the end", last)
        calls = []
        for statement in statements:
            function, arguments = _call(statement, refuse)
            try:
                calls.append(Call(function, arguments))
            except FidkitError as error:
                raise type(error)(f"{name}, line {statement.lineno}: {error}") from None
        try:
            chain = cls(calls, title)
        except FidkitError as error:
            raise FidkitError(f"{name}: {error}") from None
        # whatever was not looked at above must be as we would write it
        again = ast.parse(chain.source).body[2]
        assert isinstance(again, ast.FunctionDef)
        for ours, theirs, call in zip(again.body, body[1].body, [*calls, None], strict=True):
            if ast.dump(ours) != ast.dump(_normal(theirs, call)):
                raise refuse(f"expected `{ast.unparse(ours)}`", theirs)
        again.body = body[1].body = []
        if ast.dump(again) != ast.dump(body[1]):
            raise refuse(f"expected `def process({chain.takes}):`", body[1])
        return chain


def chain_of(signal: xr.DataArray, title: str = "") -> Chain:
    """The chain that made a signal, from its history.

    Parameters
    ----------
    signal : xarray.DataArray
        FID or spectrum made by fidkit steps.
    title : str
        One line saying what the chain is for.

    Returns
    -------
    Chain
        The steps in order; empty for a raw record.

    Raises
    ------
    FidkitError
        If the history is no list of fidkit steps.
    """
    signals.is_fid(signal)
    calls = []
    for number, line in enumerate(str(signal.attrs.get("history", "")).splitlines(), 1):
        try:
            node = ast.parse(line.strip(), mode="eval").body if len(line) <= LARGEST_TEXT else None
            if not (
                isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and not node.args
            ):
                raise ValueError
            arguments = {str(k.arg): ast.literal_eval(k.value) for k in node.keywords}
        except (ValueError, TypeError, SyntaxError, MemoryError, RecursionError):
            raise FidkitError(
                f"line {number} of the history is no fidkit step: {line[:80]!r}; "
                "start again from the raw record"
            ) from None
        try:
            calls.append(Call(node.func.id, arguments))
        except FidkitError as error:
            raise type(error)(f"line {number} of the history: {error}") from None
    return Chain(calls, title)


def _refusal(name: str, what: str, node: ast.AST | None = None) -> FidkitError:
    line = f", line {node.lineno}" if isinstance(node, ast.stmt | ast.expr) else ""
    return FidkitError(
        f"{name}{line}: {what}; a chain is one function process(...) of fidkit steps, as "
        "Chain.save writes it"
    )


def _parsed(text: str, refuse: Callable[..., FidkitError]) -> tuple[list[ast.stmt], str]:
    """The statements of a text that is short and flat enough, and the title above them."""
    if len(text) > LARGEST_TEXT:
        raise refuse(f"longer than {LARGEST_TEXT} characters")
    if "\0" in text:
        raise refuse("holds a null character")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # odd escapes in a hostile text are none of ours
            tree = ast.parse(text)
    except SyntaxError as error:
        raise refuse(f"not Python: {error.msg} in line {error.lineno}") from None
    except (MemoryError, RecursionError, ValueError):
        raise refuse("too deep to read, or not text") from None
    level: list[ast.AST] = [tree]
    for _ in range(DEEPEST_NESTING):
        level = [child for node in level for child in ast.iter_child_nodes(node)]
    if level:
        raise refuse(f"nested deeper than {DEEPEST_NESTING} levels")
    body, title = tree.body, ""
    if body and isinstance(body[0], ast.Expr) and isinstance(body[0].value, ast.Constant):
        first, *_ = [*str(body[0].value.value).strip().splitlines(), ""]
        title = first.partition(": ")[2] if first.startswith("Saved by fidkit") else first
        body = body[1:]
    return body, title


def _call(statement: ast.stmt, refuse: Callable[..., FidkitError]) -> tuple[str, dict[str, object]]:
    """Name and arguments of the one call that a line of a chain makes."""
    value = statement.value if isinstance(statement, ast.Assign) else None
    if not (
        isinstance(value, ast.Call)
        and isinstance(value.func, ast.Attribute)
        and isinstance(value.func.value, ast.Name)
        and value.func.value.id == "fk"
    ):
        raise refuse("expected a line such as `fid = fk.remove_offset(fid)`", statement)
    arguments: dict[str, object] = {}
    for keyword in value.keywords:
        try:
            literal = ast.literal_eval(keyword.value)
        except (ValueError, TypeError, SyntaxError, MemoryError, RecursionError):
            raise refuse(f"{keyword.arg}: only plain values are allowed", value) from None
        if keyword.arg is None or keyword.arg in arguments:
            raise refuse("every argument must be named, once", value)
        arguments[keyword.arg] = literal
    return value.func.attr, arguments


def _normal(statement: ast.stmt, call: Call | None) -> ast.stmt:
    """A line with its arguments in the order of the signature and their values as we write them."""
    if call is not None and isinstance(statement, ast.Assign):
        value = statement.value
        assert isinstance(value, ast.Call)
        value.keywords = [
            ast.keyword(name, ast.parse(repr(wanted), mode="eval").body)
            for name, wanted in call.arguments.items()
        ]
    return statement
