"""Wrong design files: each problem names its key, what was found, what is accepted and a remedy."""

import pytest

from afterkick.design import read_design
from afterkick.design.names import C_KEYWORDS, CPP_KEYWORDS
from afterkick.errors import Problem, Refused

BASE = """
[design]
name = "skiff"
title = "Yaw damper"
[model]
kind = "ode"
output = [1.0, 2.0, 3.0]
input = [1.0]
before = [0.0, 0.0]
[sampling]
rate_hz = 1000
method = "bilinear"
[signals]
input = { unit = "g", full_scale = 16.0, peak = 12.0 }
output = { unit = "g", full_scale = 16.0 }
[arithmetic]
data_bits = 16
[target]
name = "host"
[budget]
dc_gain_ppm = 50
"""
MODEL = BASE[BASE.index("[model]") : BASE.index("[sampling]")]


def problems_of(text: str) -> tuple[Problem, ...]:
    with pytest.raises(Refused) as refusal:
        read_design(text, source="skiff.toml")
    for problem in refusal.value.problems:
        assert all((problem.where, problem.found, problem.accepted, problem.remedy)), problem
        assert str(problem).isprintable()
    return refusal.value.problems


def changed(old: str, new: str) -> str:
    assert BASE.count(old) >= 1
    return BASE.replace(old, new, 1)


def with_model(lines: str) -> str:
    return BASE.replace(MODEL, f"[model]\n{lines}\n")


def with_block(lines: str) -> str:
    return with_model(f'kind = "blocks"\n[[model.block]]\n{lines}')


def with_method(method: str, option: str) -> str:
    return changed('method = "bilinear"', f'method = "{method}"\n{option}')


def with_arithmetic(line: str) -> str:
    return changed("data_bits = 16", line)


def with_budget(line: str) -> str:
    return changed("dc_gain_ppm = 50", line)


BUTTERWORTH = 'type = "lowpass"\nfamily = "butterworth"\norder = 2\ncorner_hz = 10.0'
BAND = 'type = "bandpass"\nfamily = "bessel"\norder = 2\nlow_hz = 10.0\nhigh_hz = 20.0'
ROOTS = 'kind = "roots"\npoles = [[-1.0, 0.0]]'
MATRICES = 'kind = "matrices"\na = [[0.0, 1.0], [-1.0, -1.0]]\nb = [0.0, 1.0]\nc = [1.0, 0.0]'
PID = 'type = "pid"\nki = 0.0'

# id: (text, key path, words of the message)
WRONG: dict[str, tuple[str, str, list[str]]] = {
    # the text as a whole
    "no value": (changed("rate_hz = 1000", "rate_hz ="), "skiff.toml", ["TOML", "line 11", "column 10"]),
    "open list": (changed("input = [1.0]", "input = [1.0"), "skiff.toml", ["TOML", "line 9"]),
    "open text at the end": (BASE + 'x = "abc', "skiff.toml", ["TOML", "line 22, column 9", "end of the text"]),
    "key twice": (changed("rate_hz = 1000", "rate_hz = 1000\nrate_hz = 1000"), "skiff.toml", ["TOML", "line 12"]),
    "raw control character": (changed("Yaw damper", "Yaw\x07damper"), "skiff.toml", ["TOML", "line 4"]),
    "nested too deeply": (changed("[1.0]", "[" * 9000), "skiff.toml", ["nested too deeply"]),
    "integer of 5000 digits": (changed("1000", "9" * 5000), "skiff.toml", ["thousands of digits", "line 11"]),
    "no design at all": ("#" * 300_000, "skiff.toml", ["characters"]),
    # tables and keys
    "table missing": (changed("[sampling]\nrate_hz = 1000\nmethod", "#"), "sampling", ["missing", "add a table"]),
    "model missing": (BASE.replace(MODEL, ""), "model", ["missing"]),
    "name missing": (changed('name = "skiff"', ""), "design.name", ["missing", "C identifier"]),
    "unknown table": (changed("[budget]", "[bugdet]"), "bugdet", ["unknown key", "did you mean budget"]),
    "unknown key": (changed("data_bits", "data_bit"), "arithmetic.data_bit", ["did you mean data_bits", "rounding"]),
    "required key misspelt": (changed("rate_hz", "rate_hx"), "sampling.rate_hx", ["did you mean rate_hz"]),
    "unknown key of another kind": (changed("input = [1.0]", "input = [1.0]\ngain = 3"), "model.gain", ["unknown key"]),
    "unprintable key": (BASE + '"a\\u202eb" = 1', 'budget."a\\u202eb"', ["unknown key", "remove"]),
    "table as a list": (changed("[target]", "[[target]]"), "target", ["a list of 1", "a table"]),
    "table as a number": ("budget = 3\n" + BASE.replace("[budget]\ndc_gain_ppm = 50", ""), "budget", ["3", "a table"]),
    # types and numbers
    "number as text": (changed("1000", '"1000"'), "sampling.rate_hz", ["a number", "without quotes"]),
    "number as bool": (changed("[1.0]", "[true]"), "model.input[0]", ["true", "a number"]),
    "number as list": (changed("1000", "[1000]"), "sampling.rate_hz", ["a list of 1", "a number"]),
    "number as date": (changed("1000", "1979-05-27"), "sampling.rate_hz", ["date", "a number"]),
    "text as number": (changed('"Yaw damper"', "5"), "design.title", ["5", "text", "quotes"]),
    "list as number": (changed("[1.0]", "1.0"), "model.input", ["1.0", "a list of 1 to 17 numbers"]),
    "list as text": (changed("[1.0]", '"1.0"'), "model.input", ["a list of 1 to 17 numbers"]),
    "integer as float": (changed("data_bits = 16", "data_bits = 16.0"), "arithmetic.data_bits", ["write 16"]),
    "integer as bool": (
        changed("data_bits = 16", "data_bits = true"),
        "arithmetic.data_bits",
        ["an integer from 8 to 32"],
    ),
    "integer as nan": (
        changed("data_bits = 16", "data_bits = nan"),
        "arithmetic.data_bits",
        ["an integer from 8 to 32"],
    ),
    "bool as text": (with_arithmetic('carry = "no"'), "arithmetic.carry", ["true or false"]),
    "nan": (changed("[1.0]", "[nan]"), "model.input[0]", ["NaN", "finite"]),
    "infinity": (changed("1000", "-inf"), "sampling.rate_hz", ["Infinity", "finite"]),
    "huge exponent": (changed("3.0", "1e301"), "model.output[2]", ["1e300"]),
    "tiny exponent": (changed("3.0", "1e-99999999"), "model.output[2]", ["1e-300"]),
    "exponent beyond decimals": (changed("3.0", "1e" + "9" * 40), "model.output[2]", ["1e300"]),
    "exponent of 5000 digits": (changed("3.0", "1e" + "9" * 5000), "model.output[2]", ["1e300"]),
    "too many digits": (changed("3.0", "3." + "1" * 400), "model.output[2]", ["400 digits"]),
    "huge integer": (changed("3.0", "9" * 401), "model.output[2]", ["400 digits"]),
    "huge hexadecimal integer": (
        changed("data_bits = 16", "data_bits = 0x" + "f" * 9000),
        "arithmetic.data_bits",
        ["32"],
    ),
    # [design]
    "name with a space": (changed("skiff", "a b"), "design.name", ["C identifier"]),
    "name with a digit first": (changed("skiff", "2nd"), "design.name", ["C identifier"]),
    "name with an underscore first": (changed("skiff", "_a"), "design.name", ["C identifier"]),
    "name with an underscore last": (changed("skiff", "a_"), "design.name", ["two underscores"]),
    "name with two underscores": (changed("skiff", "a__b"), "design.name", ["two underscores"]),
    "name with a letter beyond ASCII": (changed("skiff", "é"), "design.name", ["C identifier"]),
    "name with a line end": (changed("skiff", "a\\n"), "design.name", ["C identifier"]),
    "name empty": (changed("skiff", ""), "design.name", ["C identifier"]),
    "name too long": (changed("skiff", "a" * 41), "design.name", ["41 characters", "1 to 40"]),
    "name a C keyword": (changed("skiff", "register"), "design.name", ["keyword"]),
    "name a C++ keyword": (changed("skiff", "template"), "design.name", ["keyword"]),
    "name a standard header": (changed("skiff", "signal"), "design.name", ["header"]),
    "name of an integer type": (changed("skiff", "int16"), "design.name", ["stdint.h"]),
    "name of a device": (changed("skiff", "AUX"), "design.name", ["file"]),
    "title with a line end": (changed("Yaw damper", "Yaw\\ndamper"), "design.title", ["U+000A", "one line"]),
    "title with a bidirectional control": (changed("Yaw damper", "Yaw\\u202E"), "design.title", ["U+202E"]),
    "title with a line separator": (changed("Yaw damper", "Yaw\\u2028"), "design.title", ["U+2028"]),
    "title with an escape": (changed("Yaw damper", "\\u001b[31m"), "design.title", ["U+001B"]),
    "title too long": (changed("Yaw damper", "x" * 121), "design.title", ["121 characters", "120"]),
    "title empty": (changed("Yaw damper", ""), "design.title", ["0 characters", "leave the key out"]),
    # [model]
    "kind missing": (changed('kind = "ode"', ""), "model.kind", ["missing", '"ratio"']),
    "kind misspelt key": (changed("kind", "knd"), "model.kind", ["rename", "knd"]),
    "kind unknown": (changed('"ode"', '"odes"'), "model.kind", ["odes", 'did you mean "ode"']),
    "kind no text": (changed('"ode"', "1"), "model.kind", ['"ode"', "quotes"]),
    "coefficients empty": (changed("[1.0]", "[]"), "model.input", ["an empty list"]),
    "order 0": (changed("[1.0, 2.0, 3.0]", "[1.0]"), "model.output", ["order 0", "1 to 16"]),
    "order 17": (changed("[1.0, 2.0, 3.0]", str([1.0] * 18)), "model.output", ["order 17", "split"]),
    "input order 17": (changed("[1.0]", str([1.0] * 18)), "model.input", ["order 17"]),
    "leading zero": (changed("[1.0, 2.0, 3.0]", "[0.0, 2.0, 3.0]"), "model.output", ["leading zeros"]),
    "numerator all zero": (changed("[1.0]", "[0]"), "model.input", ["other than 0"]),
    "before too long": (changed("[0.0, 0.0]", "[0.0, 0.0, 0.0]"), "model.before", ["a list of 3", "at most 2"]),
    "ratio of order 0": (
        with_model('kind = "ratio"\nnumerator = [1, 0]\ndenominator = [1]'),
        "model.denominator",
        ["order 0"],
    ),
    "roots without poles": (with_model('kind = "roots"\npoles = []'), "model.poles", ["an empty list"]),
    "root as a number": (with_model('kind = "roots"\npoles = [-1.0]'), "model.poles[0]", ["[re, im]", "real root"]),
    "root of three": (with_model('kind = "roots"\npoles = [[1, 2, 3]]'), "model.poles[0]", ["a list of 3", "[re, im]"]),
    "root below the axis": (with_model(ROOTS + "\nzeros = [[-1, -2]]"), "model.zeros[0][1]", ["-2", "conjugate pair"]),
    "roots of order 18": (
        with_model(f'kind = "roots"\npoles = {[[-1.0, 1.0]] * 9}'),
        "model.poles",
        ["order 18", "counts as two"],
    ),
    "roots gain 0": (with_model(ROOTS + "\ngain = 0.0"), "model.gain", ["other than 0"]),
    "roots unit": (with_model(ROOTS + '\nunit = "hz"'), "model.unit", ['"rad/s" or "Hz"', 'did you mean "Hz"']),
    "matrices not square": (
        with_model(MATRICES.replace("-1.0, -1.0", "-1.0")),
        "model.a[1]",
        ["a list of 1", "square"],
    ),
    "matrices b too long": (with_model(MATRICES.replace("b = [", "b = [1, ")), "model.b", ["a list of 3", "2 numbers"]),
    "matrices c too short": (with_model(MATRICES.replace("c = [1.0, ", "c = [")), "model.c", ["a list of 1"]),
    "matrices b as a column": (
        with_model(MATRICES.replace("[0.0, 1.0]\nc", "[0, [1]]\nc")),
        "model.b[1]",
        ["a number"],
    ),
    "matrices empty": (with_model(MATRICES.replace("[[0.0, 1.0], [-1.0, -1.0]]", "[]")), "model.a", ["an empty list"]),
    "matrices order 17": (with_model(f'kind = "matrices"\na = {[[1]] * 17}\nb = [1]\nc = [1]'), "model.a", ["of 17"]),
    # blocks
    "no blocks": (with_model('kind = "blocks"\nblock = []'), "model.block", ["an empty list", "[[model.block]]"]),
    "block in single brackets": (with_model('kind = "blocks"\n[model.block]'), "model.block", ["[[model.block]]"]),
    "block without type": (with_block("gain = 1"), "model.block[0].type", ["missing"]),
    "block type unknown": (with_block('type = "low-pass"'), "model.block[0].type", ['did you mean "lowpass"']),
    "block number": (
        with_block('type = "integrator"\n[[model.block]]\ntype = "lag"\ncorner_hz = -1'),
        "model.block[1].corner_hz",
        ["-1", "above 0"],
    ),
    "gain 0": (with_block('type = "gain"\ngain = 0'), "model.block[0].gain", ["other than 0"]),
    "lag with both": (
        with_block('type = "lag"\ncorner_hz = 1\ntime_constant_s = 1'),
        "model.block[0].corner_hz",
        ["both"],
    ),
    "lag with neither": (with_block('type = "lag"'), "model.block[0].corner_hz", ["neither", "exactly one"]),
    "family unknown": (
        with_block(BUTTERWORTH.replace("butter", "button")),
        "model.block[0].family",
        ['"butterworth"?'],
    ),
    "block order 0": (with_block(BUTTERWORTH.replace("= 2", "= 0")), "model.block[0].order", ["1 to 16"]),
    "block order 17": (with_block(BUTTERWORTH.replace("= 2", "= 17")), "model.block[0].order", ["1 to 16"]),
    "band order 9": (with_block(BAND.replace("= 2\n", "= 9\n")), "model.block[0].order", ["1 to 8"]),
    "band edges exchanged": (
        with_block(BAND.replace("= 10.0", "= 30.0")),
        "model.block[0].high_hz",
        ["more than low_hz"],
    ),
    "band edges equal": (with_block(BAND.replace("= 10.0", "= 20.0")), "model.block[0].high_hz", ["more than low_hz"]),
    "ripple not used": (with_block(BUTTERWORTH + "\nripple_db = 1"), "model.block[0].ripple_db", ["does not use"]),
    "ripple missing": (
        with_block(BUTTERWORTH.replace("butterworth", "chebyshev")),
        "model.block[0].ripple_db",
        ["missing", "chebyshev"],
    ),
    "stop band not used": (
        with_block(BUTTERWORTH.replace("butterworth", "chebyshev") + "\nripple_db = 1\nstop_db = 40"),
        "model.block[0].stop_db",
        ["does not use", "elliptic"],
    ),
    "stop band missing": (
        with_block(BUTTERWORTH.replace("butterworth", "inverse-chebyshev")),
        "model.block[0].stop_db",
        ["missing"],
    ),
    "stop band above the ripple": (
        with_block(BUTTERWORTH.replace("butterworth", "elliptic") + "\nripple_db = 3\nstop_db = 2"),
        "model.block[0].stop_db",
        ["more than ripple_db"],
    ),
    "ripple 0": (
        with_block(BUTTERWORTH.replace("butterworth", "chebyshev") + "\nripple_db = 0"),
        "model.block[0].ripple_db",
        ["above 0"],
    ),
    "ripple of absurd size": (
        with_block(BUTTERWORTH.replace("butterworth", "chebyshev") + "\nripple_db = 1e6"),
        "model.block[0].ripple_db",
        ["at most 400"],
    ),
    "quality 0": (
        with_block('type = "second-order"\ncorner_hz = 1\nquality = 0'),
        "model.block[0].quality",
        ["above 0"],
    ),
    "depth below 0": (
        with_block('type = "notch"\ncenter_hz = 1\nquality = 1\ndepth_db = -3'),
        "model.block[0].depth_db",
        ["-3", "above 0"],
    ),
    "pid all 0": (with_block(PID), "model.block[0].kp", ["kp, ki and kd all 0"]),
    "pid corner without kd": (
        with_block('type = "pid"\nki = 1\nderivative_corner_hz = 5'),
        "model.block[0].derivative_corner_hz",
        ["while kd is 0"],
    ),
    "farad 0": (with_block('type = "rc-lowpass"\nohm = 1\nfarad = 0'), "model.block[0].farad", ["above 0"]),
    "ohm missing": (with_block('type = "rc-highpass"\nfarad = 1'), "model.block[0].ohm", ["missing"]),
    "delay below 0": (with_block('type = "dead-time"\ndelay_s = -1'), "model.block[0].delay_s", ["at least 0"]),
    # [sampling]
    "rate 0": (changed("1000", "0"), "sampling.rate_hz", ["0", "above 0"]),
    "period below 0": (changed("rate_hz = 1000", "period_s = -0.1"), "sampling.period_s", ["above 0"]),
    "rate and period": (changed("1000", "1000\nperiod_s = 0.001"), "sampling.period_s", ["both", "exactly one"]),
    "neither rate nor period": (changed("rate_hz = 1000", ""), "sampling.rate_hz", ["missing", "period_s"]),
    "method missing": (changed('method = "bilinear"', ""), "sampling.method", ["missing", '"matched"']),
    "method unknown": (with_method("bi-linear", ""), "sampling.method", ['did you mean "bilinear"']),
    "match not used": (
        with_method("zero-order-hold", "match_hz = 3"),
        "sampling.match_hz",
        ["does not use", "bilinear"],
    ),
    "match at half the rate": (with_method("bilinear", "match_hz = 500"), "sampling.match_hz", ["below 500 Hz"]),
    "first sample not used": (with_method("matched", 'first_sample = "half"'), "sampling.first_sample", ["not use"]),
    "first sample unknown": (
        with_method("impulse-invariant", 'first_sample = "none"'),
        "sampling.first_sample",
        ['"half" or "full"'],
    ),
    "zeros at infinity not used": (
        with_method("bilinear", 'zeros_at_infinity = "delay"'),
        "sampling.zeros_at_infinity",
        ['only with "matched"'],
    ),
    # [signals]
    "full scale 0": (changed("full_scale = 16.0, ", "full_scale = 0, "), "signals.input.full_scale", ["above 0"]),
    "peak 0": (changed("12.0", "0.0"), "signals.input.peak", ["above 0"]),
    "peak above full scale": (changed("12.0", "16.5"), "signals.input.peak", ["16.5", "at most full_scale, 16"]),
    "peak of the output": (changed("16.0 }", "16.0, peak = 1 }"), "signals.output.peak", ["input only"]),
    "unit with a tab": (changed('"g"', '"g\\t"'), "signals.input.unit", ["U+0009"]),
    "unit as number": (changed('"g"', "1"), "signals.input.unit", ["text", "quotes"]),
    # [arithmetic]
    "data bits 7": (with_arithmetic("data_bits = 7"), "arithmetic.data_bits", ["8 to 32", "nearest is 8"]),
    "coefficient bits 33": (with_arithmetic("coefficient_bits = 33"), "arithmetic.coefficient_bits", ["8 to 32"]),
    "accumulator bits 48": (with_arithmetic("accumulator_bits = 48"), "arithmetic.accumulator_bits", ["32 or 64"]),
    "rounding unknown": (with_arithmetic('rounding = "up"'), "arithmetic.rounding", ['"nearest", "floor" or "even"']),
    "overflow unknown": (with_arithmetic('overflow = "saturated"'), "arithmetic.overflow", ['did you mean "saturate"']),
    "scaling unknown": (with_arithmetic('scaling = "two norm"'), "arithmetic.scaling", ['did you mean "two-norm"']),
    "structure unknown": (with_arithmetic('structure = "directly"'), "arithmetic.structure", ['did you mean "direct"']),
    "kind of arithmetic unknown": (with_arithmetic('kind = "float64"'), "arithmetic.kind", ['"fixed" or "float32"']),
    "state bits not used": (with_arithmetic("state_bits = 32"), "arithmetic.state_bits", ['"direct"', '"transposed"']),
    "state bits below data bits": (with_arithmetic("state_bits = 8"), "arithmetic.state_bits", ["at least data_bits"]),
    "clamp in a cascade": (with_arithmetic("clamp = [-1, 1]"), "arithmetic.clamp", ['"direct"', '"parallel"']),
    "clamp exchanged": (
        with_arithmetic('structure = "auto"\nclamp = [1, -1]'),
        "arithmetic.clamp",
        ["low less than high"],
    ),
    "clamp beyond full scale": (
        with_arithmetic('structure = "auto"\nclamp = [-1, 17]'),
        "arithmetic.clamp",
        ["[-1, 17]", "full_scale, 16"],
    ),
    # [target], [budget]
    "target in another folder": (changed('"host"', '"../host"'), "target.name", ["profile name", "afterkick targets"]),
    "budget below 0": (with_budget("noise_counts = -1"), "budget.noise_counts", ["at least 0"]),
    "band missing": (with_budget("magnitude_db = 1"), "budget.band_hz", ["missing", "magnitude_db"]),
    "band at half the rate": (
        with_budget("phase_deg = 1\nband_hz = 500"),
        "budget.band_hz",
        ["500", "half the sampling"],
    ),
    "band 0": (with_budget("band_hz = 0"), "budget.band_hz", ["above 0"]),
}


def test_the_base_is_good() -> None:
    for text in (BASE, with_model(ROOTS), with_model(MATRICES), with_block(BUTTERWORTH), with_block(BAND)):
        read_design(text)


@pytest.mark.parametrize(("text", "where", "words"), WRONG.values(), ids=WRONG.keys())
def test_one_problem_one_message(text: str, where: str, words: list[str]) -> None:
    problems = problems_of(text)
    assert [problem.where for problem in problems] == [where]
    for word in words:
        assert word in str(problems[0])


def test_every_keyword_is_refused_as_a_name() -> None:
    for word in (C_KEYWORDS + CPP_KEYWORDS).split():
        (problem,) = problems_of(changed("skiff", word))
        assert problem.where == "design.name"


def test_all_problems_are_reported_together() -> None:
    text = """
    [design]
    name = "int"
    titel = "x"
    [model]
    kind = "blocks"
    [[model.block]]
    type = "lowpass"
    family = "elliptic"
    order = 0
    corner_hz = -5
    ripple_db = 3
    [[model.block]]
    type = "lagg"
    [[model.block]]
    type = "ratio"
    numerator = [0.0, "x", true]
    denominator = [1.0]
    [sampling]
    rate_hz = 100
    method = "matched"
    first_sample = "half"
    match_hz = "3"
    zeros_at_infinity = 5
    [signals]
    output = { full_scale = 1, peak = 2 }
    [arithmetic]
    structure = "delay"
    carry = 3
    [budget]
    band_hz = 60
    noise_counts = -1
    """
    assert sorted(problem.where for problem in problems_of(text)) == [
        "arithmetic.carry",
        "arithmetic.structure",
        "budget.band_hz",
        "budget.noise_counts",
        "design.name",
        "design.titel",
        "model.block[0].corner_hz",
        "model.block[0].order",
        "model.block[0].stop_db",
        "model.block[1].type",
        "model.block[2].numerator",
        "model.block[2].numerator[1]",
        "model.block[2].numerator[2]",
        "sampling.first_sample",
        "sampling.match_hz",
        "sampling.zeros_at_infinity",
        "signals.output.peak",
    ]


def test_an_empty_file_lacks_three_tables() -> None:
    assert [problem.where for problem in problems_of("")] == ["design", "model", "sampling"]


def test_a_wrong_rate_does_not_hide_a_wrong_option() -> None:
    text = with_method("bilinear", 'first_sample = "half"').replace("rate_hz = 1000", "rate_hz = 0")
    assert {problem.where for problem in problems_of(text)} == {"sampling.rate_hz", "sampling.first_sample"}


def test_a_wrong_option_does_not_hide_a_wide_band() -> None:
    text = with_method("bilinear", "match_hz = 0").replace("dc_gain_ppm = 50", "band_hz = 600")
    assert {problem.where for problem in problems_of(text)} == {"sampling.match_hz", "budget.band_hz"}


def test_a_misspelt_key_has_one_message() -> None:
    for text in (
        with_method("zero-order-hold", "match_hx = 3"),
        changed("rate_hz = 1000", "period = 0.001"),
        with_block('type = "lag"\ncorner_khz = 1'),
        with_block(BUTTERWORTH.replace("butterworth", "chebyshev") + "\nripple = 1"),
        with_block(BUTTERWORTH + "\nstop_hz = 1"),
        with_budget("magnitude_db = 1\nband = 3"),
    ):
        (problem,) = problems_of(text)
        assert problem.found == "an unknown key"
        assert "did you mean" in problem.remedy


def test_a_long_list_has_one_message() -> None:
    (problem,) = problems_of(changed("[1.0]", str(["x"] * 20_000)))
    assert problem.where == "model.input"
