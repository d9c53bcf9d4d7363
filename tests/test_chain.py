"""Chains: text that is parsed, never executed; the round trip; what is refused."""

import importlib.util
import math
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as some

import fidkit as fk
import fidkit.chain
from fidkit.chain import DEEPEST_NESTING, LARGEST_TEXT, MOST_STEPS, Call, Chain

GOOD = '''"""Saved by fidkit 0.1.0: trial"""

import fidkit as fk


def process(fid):
    fid = fk.apodize_exponential(fid, broadening=1.5)  # broadening [Hz]
    fid = fk.zero_fill(fid, factor=4.0)
    spectrum = fk.fourier_transform(fid)
    return spectrum
'''


@pytest.fixture
def fid():
    time = np.arange(256) * 1e-3
    decay = np.exp((2j * np.pi * 40 - 20) * time)
    return fk.from_array(decay, dwell_time=1e-3, carrier_frequency=63.87e6)


def chain():
    return Chain(
        [
            Call("apodize_exponential", broadening=1.5),
            Call("zero_fill", factor=4),
            "fourier_transform",
        ],
        title="trial",
    )


def test_saved_text_is_plain_python():
    assert chain().source == GOOD.replace("0.1.0", fk.__version__)


def test_round_trip(tmp_path):
    path = chain().save(tmp_path / "trial.py")
    loaded = Chain.load(path)
    assert loaded == chain()
    assert loaded.title == "trial"
    assert (loaded.takes, loaded.gives) == ("fid", "spectrum")
    assert loaded.source == path.read_text()


def test_run_by_plain_python(tmp_path, fid):
    path = chain().save(tmp_path / "trial.py")
    spec = importlib.util.spec_from_file_location("trial", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    assert module.process(fid).identical(chain()(fid))


def test_chain_of_a_spectrum(fid, tmp_path):
    spectrum = chain()(fid)
    assert fk.chain_of(spectrum) == chain()
    by_hand = fk.fourier_transform(
        fk.zero_fill(fk.apodize_exponential(fid, broadening=1.5), factor=4)
    )
    assert fk.chain_of(by_hand, "by hand").save(tmp_path / "a.py").exists()
    assert Chain.load(tmp_path / "a.py")(fid).identical(spectrum)
    assert len(fk.chain_of(fid)) == 0


def test_empty_chain(fid, tmp_path):
    path = Chain().save(tmp_path / "empty.py")
    assert Chain.load(path)(fid).identical(fid)


def test_hand_edited_text_may_differ_in_form(tmp_path):
    text = GOOD.replace("broadening=1.5)  # broadening [Hz]", "broadening = 1.50 ) # wider")
    text = text.replace("factor=4.0", "factor=4")
    assert Chain.from_source(text) == chain()


def test_steps_must_fit():
    with pytest.raises(fk.FidkitError, match="step 2 of the chain, zero_fill, takes a fid"):
        Chain(["fourier_transform", "zero_fill"])
    with pytest.raises(fk.FidkitError, match="there is no step 'no_such'"):
        Chain(["no_such"])
    with pytest.raises(fk.FidkitError, match="broadening must be a number"):
        Call("apodize_exponential", broadening=-1)
    with pytest.raises(fk.FidkitError, match=f"at most {MOST_STEPS} steps"):
        Chain(["apodize_exponential"] * (MOST_STEPS + 1))


def test_an_error_tells_which_step(fid):
    with pytest.raises(fk.FidkitError, match="step 2 of the chain: zero_fill: points must be"):
        Chain(["apodize_exponential", Call("zero_fill", points=4)])(fid)


#: Lines that would leave a trace if anything of them were executed.
TRACE = "__import__('pathlib').Path('trace').touch()"


def body(*lines, head="def process(fid):"):
    inside = "".join(f"    {line}\n" for line in lines)
    return f'"""Saved by fidkit 0.1.0: trial."""\n\nimport fidkit as fk\n\n\n{head}\n{inside}'


HOSTILE = {
    "import at the top": "import os\n" + GOOD,
    "import in place of fidkit": GOOD.replace("import fidkit as fk", "import os as fk"),
    "import inside": body("import os", "return fid"),
    "from import": GOOD.replace("import fidkit as fk", "from fidkit import *"),
    "two imports in one": GOOD.replace("import fidkit as fk", "import fidkit as fk, os"),
    "call at the top": GOOD + TRACE + "\n",
    "call before": TRACE + "\n" + GOOD,
    "call inside": body(TRACE, "return fid"),
    "call as value": body(f"fid = fk.zero_fill(fid, factor={TRACE})", "return fid"),
    "call in the return": body(f"return {TRACE}"),
    "f-string": body(
        "fid = fk.fourier_transform(fid, first_point=f'{" + TRACE + "}')", "return fid"
    ),
    "f-string as head": GOOD.replace('"""Saved', 'f"""{' + TRACE + "}Saved", 1),
    "lambda": body("fid = fk.zero_fill(fid, factor=(lambda: 4)())", "return fid"),
    "comprehension": body("fid = fk.zero_fill(fid, factor=[4 for _ in '1'][0])", "return fid"),
    "conditional": body("fid = fk.zero_fill(fid, factor=4 if True else 2)", "return fid"),
    "arithmetic": body("fid = fk.zero_fill(fid, factor=9**9**9)", "return fid"),
    "decorator": body("return fid", head=f"@(lambda f: {TRACE})\ndef process(fid):"),
    "default argument": body("return fid", head=f"def process(fid={TRACE}):"),
    "annotation": body("return fid", head=f"def process(fid: {TRACE}):"),
    "return annotation": body("return fid", head=f"def process(fid) -> {TRACE}:"),
    "second parameter": body("return fid", head="def process(fid, more):"),
    "star parameter": body("return fid", head="def process(*fid):"),
    "asynchronous": body("return fid", head="async def process(fid):"),
    "class": body("return fid", head="class process:"),
    "walrus": body("fid = fk.zero_fill((other := fid))", "return fid"),
    "walrus as value": body("fid = fk.zero_fill(fid, factor=(x := 4))", "return fid"),
    "deep brackets": body(
        f"fid = fk.zero_fill(fid, factor={'(' * 5000}4{')' * 5000})", "return fid"
    ),
    "deep signs": body(f"fid = fk.zero_fill(fid, factor={'-' * 20000}4)", "return fid"),
    "deep attributes": body(f"fid = fk{'.a' * 20000}(fid)", "return fid"),
    "huge": GOOD + "#" * LARGEST_TEXT,
    "null": GOOD.replace("trial", "tri\0al"),
    "unknown step": body("fid = fk.no_such_step(fid)", "return fid"),
    "private name": body("fid = fk.__getattr__(fid)", "return fid"),
    "module inside": body("fid = fk.cli.main(fid)", "return fid"),
    "reader": body("fid = fk.read(fid)", "return fid"),
    "other module": body("fid = os.system(fid)", "return fid"),
    "wrong variable flow": body(
        "other = fk.zero_fill(fid)", "fid = fk.apodize_exponential(fid)", "return other"
    ),
    "result thrown away": body("fk.zero_fill(fid)", "return fid"),
    "wrong variable in": body("fid = fk.zero_fill(fk)", "return fid"),
    "wrong variable out": body("fid = fk.zero_fill(fid)", "return fk"),
    "two targets": body("fid = fk = fk.zero_fill(fid)", "return fid"),
    "unpacking": body("fid, = fk.zero_fill(fid)", "return fid"),
    "attribute as target": body("fk.read = fk.zero_fill(fid)", "return fid"),
    "added assignment": body("fid += fk.zero_fill(fid)", "return fid"),
    "nothing returned": body("fid = fk.zero_fill(fid)"),
    "bare return": body("return"),
    "two returns": body("return fid", "return fid"),
    "global": body("global fk", "return fid"),
    "loop": body("for fid in fid: pass", "return fid"),
    "keyword twice": body("fid = fk.zero_fill(fid, factor=2, factor=4)", "return fid"),
    "star arguments": body("fid = fk.zero_fill(*fid)", "return fid"),
    "double star arguments": body("fid = fk.zero_fill(fid, **{'factor': 4})", "return fid"),
    "positional value": body("fid = fk.zero_fill(fid, 4)", "return fid"),
    "look-alike step": body("fid = fk.zero_f\u0456ll(fid)", "return fid"),
    "look-alike package": body("fid = f\u043a.zero_fill(fid)", "return fid"),
    "value out of range": body("fid = fk.zero_fill(fid, factor=-4)", "return fid"),
    "value not a number": body("fid = fk.apodize_exponential(fid, broadening=1e999)", "return fid"),
    "steps that do not fit": body(
        "fid = fk.fourier_transform(fid)", "fid = fk.zero_fill(fid)", "return fid"
    ),
    "second function": GOOD + "\n\ndef again(fid):\n    return fid\n",
    "other name": GOOD.replace("process", "process_it"),
    "type comment and code": GOOD + "if True:\n    " + TRACE + "\n",
    "too many steps": body(*["fid = fk.zero_fill(fid)"] * (MOST_STEPS + 1), "return fid"),
    "no Python": "carrier: 63.87 MHz",
    "unfinished": GOOD[:120],
    "empty": "",
    "only a docstring": '"""Saved by fidkit 0.1.0."""\n',
    "tabs and spaces": GOOD.replace("    return", "\treturn"),
    "surrogate": body("fid = fk.fourier_transform(fid, first_point='\\ud800')", "return fid"),
    "bytes": body("fid = fk.fourier_transform(fid, first_point=b'full')", "return fid"),
    "huge number": body(f"fid = fk.zero_fill(fid, points={'9' * 5000})", "return fid"),
}


@pytest.mark.parametrize("text", HOSTILE.values(), ids=HOSTILE.keys())
def test_hostile_text_is_refused(text, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    path = tmp_path / "chain.py"
    path.write_bytes(text.encode("utf-8", "surrogatepass"))
    with pytest.raises(fk.FidkitError) as caught:
        Chain.load(path)
    assert str(caught.value).startswith("chain.py")
    assert "\n" not in str(caught.value)
    assert len(str(caught.value)) < 500
    assert list(Path.cwd().iterdir()) == [path]  # nothing was executed: no trace was left


def test_the_trace_would_be_seen(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    exec(compile(TRACE, "trial", "exec"), {})
    assert (tmp_path / "trace").exists()


def test_bytes_that_are_no_text(tmp_path):
    path = tmp_path / "chain.py"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(fk.FidkitError, match="a chain is a text file in UTF-8"):
        Chain.load(path)


def test_a_title_cannot_carry_code(tmp_path):
    title = '"""\nimport os\n"""\\'
    loaded = Chain.load(Chain(["zero_fill"], title=title).save(tmp_path / "a.py"))
    assert loaded.calls == (Call("zero_fill"),)


@pytest.mark.parametrize(
    "line",
    [
        "__import__('os').system('true')",
        "zero_fill(factor=open('x'))",
        "zero_fill(fid)",
        "zero_fill",
        "(" * 1000,
        "zero_fill(**{'factor': 2})",
        "zero_fill(factor=-1)",
        "no_such()",
    ],
)
def test_hostile_history_is_refused(line, fid):
    fid.attrs["history"] = line
    with pytest.raises(fk.FidkitError):
        fk.chain_of(fid)


# random chains --------------------------------------------------------------------------------


def values(parameter):
    """Any value that a parameter allows."""
    finite = {"allow_nan": False, "allow_infinity": False}
    low = None if parameter.range.low == -math.inf else parameter.range.low
    high = None if parameter.range.high == math.inf else parameter.range.high
    number = some.floats(low, high, exclude_min=parameter.range.above, **finite)
    kinds = {
        "number": number,
        "whole number": some.integers(
            None if low is None else math.ceil(low) + parameter.range.above,
            None if high is None else math.floor(high),
        ),
        "switch": some.booleans(),
        "choice": some.sampled_from(parameter.choices or ("",)),
        "pair": some.tuples(number, number).filter(lambda pair: pair[0] < pair[1]),
    }
    kind = kinds[parameter.kind]
    return some.none() | kind if parameter.optional else kind


@some.composite
def chains(draw):
    kind = start = draw(some.sampled_from(["fid", "spectrum"]))
    calls = []
    for _ in range(draw(some.integers(0, 8))):
        fits = [step for step in fk.STEPS.values() if step.takes in (kind, "signal")]
        step = draw(some.sampled_from(fits))
        if step.takes == "signal" and not calls and start == "spectrum":
            continue  # a chain of steps that take either is taken for one of an FID
        chosen = (
            draw(some.sets(some.sampled_from(sorted(step.parameters)))) if step.parameters else ()
        )
        arguments = {name: draw(values(step.parameters[name])) for name in sorted(chosen)}
        calls.append(Call(step.name, arguments))
        kind = kind if step.gives == "signal" else step.gives
    return Chain(calls, draw(some.text(max_size=30)))


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(chains())
def test_any_chain_comes_back_from_its_text(chain):
    again = Chain.from_source(chain.source)
    assert again == chain
    assert again.takes == chain.takes
    assert again.source == Chain(chain.calls, again.title).source


@settings(max_examples=300, deadline=None)
@given(some.text(max_size=200) | some.text("fidk.=()[]{}\"'\n :,\\@*", max_size=200))
def test_any_text_gives_a_chain_or_an_error(text):
    said = ""
    try:
        assert isinstance(Chain.from_source(text), Chain)
    except fk.FidkitError as error:
        said = str(error)
    assert "\n" not in said


def test_nesting_bound_is_below_what_python_parses():
    inner = "(" * (DEEPEST_NESTING - 2) + "4" + ")" * (DEEPEST_NESTING - 2)
    text = body(f"fid = fk.zero_fill(fid, factor={inner})", "return fid")
    assert Chain.from_source(text).calls == (Call("zero_fill", factor=4),)


def many_records(records=40, points=4096, dtype=np.complex64):
    rng = np.random.default_rng(1)
    time = 1e-4 * np.arange(points)
    frequency = rng.uniform(-2000, 2000, records)
    values = np.exp((2j * np.pi * frequency[:, None] - 40) * time)
    values = values + 0.01 * rng.standard_normal(values.shape)
    return fk.from_array(
        values.astype(dtype),
        dwell_time=1e-4,
        carrier_frequency=63.87e6,
        dims=("channel",),
        coords={"channel": np.arange(records) + 3},
    )


MANY = fk.Chain(
    [
        fk.Call("remove_offset"),
        fk.Call("apodize_matched"),
        fk.Call("zero_fill", factor=2),
        fk.Call("fourier_transform"),
        fk.Call("auto_phase", first_order=False),
        fk.Call("correct_phase", zero_order=5.0),
    ]
)


def test_many_records_in_blocks_give_the_same(monkeypatch):
    """Source: the same steps, called one after the other by hand."""
    fid = many_records()
    whole = fid
    for call in MANY:
        whole = call.spec.function(whole, **call.arguments)
    monkeypatch.setattr(fidkit.chain, "BLOCK_POINTS", 3 * 4096)  # 40 is no multiple of 3
    blocks = MANY(fid)
    xr.testing.assert_identical(blocks, whole)
    cube = fid.expand_dims(pulse_width=2).copy()
    whole = cube
    for call in MANY:
        whole = call.spec.function(whole, **call.arguments)
    xr.testing.assert_identical(MANY(cube), whole)


def test_an_array_of_dask_stays_lazy():
    """Source: the same chain on the same array in memory."""
    chain = fk.Chain(call for call in MANY if not call.spec.together)
    fid = many_records()
    lazy = chain(fid.chunk(channel=7))
    assert lazy.chunks is not None
    xr.testing.assert_identical(lazy.compute(scheduler="synchronous"), chain(fid))
    # steps that look at several records at once are computed, and say the same
    xr.testing.assert_identical(MANY(fid.chunk(channel=7)).compute(), MANY(fid))


def test_an_error_in_a_block_names_its_step(monkeypatch):
    monkeypatch.setattr(fidkit.chain, "BLOCK_POINTS", 3 * 4096)
    chain = fk.Chain([fk.Call("remove_offset"), fk.Call("remove_start", points=5000)])
    with pytest.raises(fk.FidkitError, match="step 2 of the chain: remove_start"):
        chain(many_records())


@pytest.mark.parametrize("name", [name for name, spec in fk.STEPS.items() if not spec.together])
def test_records_do_not_influence_each_other(name):
    """What a chain relies on when it takes many records in blocks."""
    spec = fk.STEPS[name]
    fid = many_records(4, 512, np.complex128)
    given = {"remove_start": {"points": 3}, "remove_end": {"keep_points": 300}}.get(name, {})
    signal = fk.fourier_transform(fid) if spec.takes == "spectrum" else fid
    if name == "make_analytic":
        signal = signal.real
    together = spec.function(signal, **given)
    for row in range(4):
        alone = spec.function(signal[row : row + 1], **given)
        # sums of several rows may be taken in another order
        rounding = 1e-12 * float(abs(together[row]).max())
        assert float(abs(alone[0] - together[row]).max()) <= rounding


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("factor=4.0", "points=0x" + "f" * 5000), "line 8: zero_fill: points must be"),
        (("factor=4.0", "points=1" + "0" * 400), "line 8: zero_fill: points must be"),
        (("factor=4.0", "factor=" + "+".join(["1"] * 990)), "nested deeper"),
        (("factor=4.0", "factor=" + "-" * 5000 + "1"), "chain"),
        (("factor=4.0", "factor=" + "(" * 5000 + "1" + ")" * 5000), "chain"),
        (
            ("fk.zero_fill(fid, factor=4.0)", "fk.zero_fill(fid, 4.0)"),
            "line 8: expected `fid = fk.z",
        ),
        (("fid = fk.zero_fill", "other = fk.zero_fill"), "line 8: expected `fid = fk.zero_fill"),
        (("def process(fid):", "def process(fid, more=1):"), "expected `def process(fid):`"),
        (("return spectrum", "return fid"), "line 10: expected `return spectrum`"),
    ],
)
def test_refusals_name_the_line_and_what_is_expected(change, message):
    with pytest.raises(fk.FidkitError) as error:
        Chain.from_source(GOOD.replace(*change))
    assert message in str(error.value)
    assert "\n" not in str(error.value)
    assert len(str(error.value)) < 400


def test_harmless_edits_by_hand_are_taken(tmp_path):
    text = GOOD.replace("broadening=1.5)", "broadening = 15e-1 )").replace("4.0", "4")
    text = text.replace("    return", "\n    # done :-( :-( (((\n    return")
    path = tmp_path / "edited.py"
    path.write_bytes(b"\xef\xbb\xbf" + text.replace("\n", "\r\n").encode())
    assert Chain.load(path) == Chain.from_source(GOOD)


@pytest.mark.parametrize(
    "calls", ["fourier_transform", [None], [fk.zero_fill], 5, [["zero_fill"]], [Call]]
)
def test_what_is_no_list_of_calls(calls):
    with pytest.raises(fk.FidkitError):
        Chain(calls)


def test_a_call_does_not_change():
    call = Call("apodize_exponential", broadening=1.0)
    with pytest.raises(TypeError):
        call.arguments["broadening"] = -5.0
    assert hash(call) == hash(Call("apodize_exponential", broadening=1.0))


def test_history_that_is_no_history():
    fid = many_records(1, 64)
    with pytest.raises(fk.FidkitError, match="line 2 of the history: zero_fill: points must"):
        fk.chain_of(fid.assign_attrs(history="remove_offset()\nzero_fill(points=-1)"))
    with pytest.raises(fk.FidkitError, match="line 1 of the history is no fidkit step"):
        fk.chain_of(fid.assign_attrs(history="__import__('os').getcwd()"))
    with pytest.raises(fk.FidkitError, match="a signal is a DataArray"):
        fk.chain_of(np.ones(4))
