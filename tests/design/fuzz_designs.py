"""Mutated design files: reading one gives a Design or its problems, never another exception.

python tests/design/fuzz_designs.py --count 20000 --seed 1

With ``--through check`` what was read walks on through the whole road: judged, printed, put into JSON, printed as C;
one text in twenty also through the command line.  A design may be refused anywhere on the road, but in no other way
than by the package's own errors, in reasonable time, and without a file left behind.
"""

import argparse
import json
import random
import re
import signal
import warnings
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryDirectory
from time import process_time
from types import FrameType

from click.testing import CliRunner

from afterkick.cli import main as command_line
from afterkick.cli.common import LACKING
from afterkick.design import Design, read_design
from afterkick.design.schema import BLOCK_TYPES, FAMILIES, METHODS
from afterkick.emit import emit_c
from afterkick.errors import Lacking, Refused, Uncertified
from afterkick.report.data import check_data
from afterkick.report.notes import emitted_notes
from afterkick.report.text import check_text
from afterkick.starters import STARTERS, starter_text
from afterkick.verdict import assess

__all__ = ["TIME_LIMIT_S", "judge", "mutations", "through_command_line", "time_limit", "walk"]

GOOD = [path.read_text("utf-8") for path in sorted((Path(__file__).parent / "good").glob("*.toml"))]
GOOD += [starter_text(starter) for starter in STARTERS]

TIME_LIMIT_S = 20
"""For one design: more would let a file stop a build."""
SLOW_S = 3.0
COMMAND_LINE_SHARE = 20
EMITTED_FILES = 4

TOKEN = re.compile(r'"[^"\n]*"|[\w.+-]+|\s+|[^\w\s]')
NUMBER = re.compile(r"(?<![\w.])-?\d[\d.e+-]*")
FINITE = re.compile(r"-?\d{1,30}(\.\d{1,30})?(e[+-]?\d{1,2})?")
KEY = re.compile(r"(?m)^(\s*)(\w+)(\s*=)")

NUMBERS = [
    *("0", "-0.0", "1", "-1", "17", "33", "64", "65", "1e300", "1e301", "-1e-301", "1e-300", "nan", "inf", "-inf"),
    *("1e99999999999999999999", "0x7fffffffffffffffffffff", "1_0", "0.1e-5", "12345678901234567890.123456789"),
    *("00", "1.", ".5", "1e", "0b101", "0o17", "9" * 401, "9" * 5000, "0." + "3" * 401, "1e" + "9" * 2000),
]
VALUES = [
    *(
        '""',
        '"x"',
        "'x'",
        "true",
        "false",
        "[]",
        "{}",
        "[[]]",
        "[[[1]]]",
        "[1, 'x']",
        "{ a = 1 }",
        "1979-05-27",
        "07:32:00",
    ),
    *(
        '"\\u202e"',
        '"\\u0000"',
        '"""a\nb"""',
        '"*/"',
        '"{{ x }}"',
        '"??/"',
        '"direct"',
        '"float32"',
        "[1, 2]",
        "[2, 1]",
    ),
    *('"' + "long " * 60 + '"', "[" * 3000, "[" * 300 + "]" * 300, str([1] * 17), str([1] * 18), str([[1, 0]] * 17)),
]
NOISE = "\0\x1b\x7f\u00a0\u202e\u2028\ud800\ufeff\U0001f6a4é\"'\\[]{}=#,.\n\r\t-+_"


def mutations(seed: int, count: int) -> Iterator[str]:
    """``count`` texts, each a good design file with one to six random changes; the same for the same ``seed``."""
    chance = random.Random(seed)
    for _ in range(count):
        text = chance.choice(GOOD)
        for _ in range(chance.choice((1, 1, 1, 2, 3, 6))):
            text = chance.choice(CHANGES)(chance, text)
        yield text


def judge(text: str) -> bool:
    """Whether the text is a design; a refusal must say what, where and how to cure it."""
    try:
        return isinstance(read_design(text), Design)
    except Refused as refusal:
        _require_clear(refusal)
    return False


def _require_clear(refusal: Refused) -> None:
    assert refusal.problems, "a refusal without a problem"
    for problem in refusal.problems:
        assert all((problem.where, problem.found, problem.accepted, problem.remedy)), problem
        assert len(str(problem)) < 2000, "a message of more than a screen"
        assert str(problem).isprintable(), "a message that a terminal can't show"


def walk(text: str) -> str:
    """The whole road, and how it ended: ``unreadable``, ``refused``, ``uncertified``, ``lacking`` or a verdict."""
    try:
        design = read_design(text)
    except Refused:
        return "unreadable"
    try:
        found = assess(design)
        shown = check_text(found)
        json.dumps(check_data(found), allow_nan=False)
        files = emit_c(found.realisation.program, notes=emitted_notes(found))
    except Refused as refusal:
        _require_clear(refusal)
        return "refused"
    except (Uncertified, Lacking) as error:
        return type(error).__name__.lower()
    assert len(files) == EMITTED_FILES
    unfit = [line for line in shown.split("\n")[1:] if not line.isprintable() or re.search(r"\b(nan|inf)\b", line)]
    assert not unfit, unfit
    return found.verdict


def through_command_line(text: str, folder: Path) -> int:
    """``check --json`` and ``emit`` on a file with this text: exit codes agree with what is printed and written."""
    path, output = folder / "mutated.toml", folder / "emitted"
    path.write_bytes(text.encode("utf-8", "surrogatepass"))
    checked = CliRunner().invoke(command_line, ["check", "--json", str(path)])
    _well_behaved(checked.exception)
    assert 0 <= checked.exit_code <= LACKING
    if checked.exit_code <= 1:
        assert isinstance(json.loads(checked.stdout, parse_constant=_no_constant), dict)
    else:
        assert checked.stdout == ""
        assert checked.stderr
    emitted = CliRunner().invoke(command_line, ["emit", str(path), "-o", str(output)])
    _well_behaved(emitted.exception)
    written = sorted(file.name for file in output.iterdir()) if output.exists() else []
    if emitted.exit_code == 0:
        assert len(written) == EMITTED_FILES, written
        assert not [name for name in written if name.startswith(".")]
    else:
        assert not output.exists(), "emit left something behind"
    return checked.exit_code


def _well_behaved(exception: BaseException | None) -> None:
    if exception is not None and not isinstance(exception, SystemExit):
        raise exception


def _no_constant(name: str) -> None:
    raise AssertionError(f"{name} in JSON")


@contextmanager
def time_limit(seconds: int) -> Iterator[None]:
    """Raises TimeoutError in the block once it has used so much processor time, however busy the machine is."""

    def over(number: int, frame: FrameType | None) -> None:
        raise TimeoutError(f"more than {seconds} s")

    before = signal.signal(signal.SIGPROF, over)
    signal.setitimer(signal.ITIMER_PROF, seconds)
    try:
        yield
    finally:
        signal.setitimer(signal.ITIMER_PROF, 0)
        signal.signal(signal.SIGPROF, before)


def _swap_tokens(chance: random.Random, text: str) -> str:
    tokens = TOKEN.findall(text)
    if len(tokens) > 1:
        i, j = chance.sample(range(len(tokens)), 2)
        tokens[i], tokens[j] = tokens[j], tokens[i]
    return "".join(tokens)


def _delete_token(chance: random.Random, text: str) -> str:
    tokens = TOKEN.findall(text)
    if tokens:
        del tokens[chance.randrange(len(tokens))]
    return "".join(tokens)


def _replace_match(pattern: re.Pattern[str], values: list[str]) -> Callable[[random.Random, str], str]:
    def change(chance: random.Random, text: str) -> str:
        matches = list(pattern.finditer(text))
        if not matches:
            return text
        match = chance.choice(matches)
        return text[: match.start()] + chance.choice(values) + text[match.end() :]

    return change


def _nudge_number(chance: random.Random, text: str) -> str:
    """A change that often leaves a good design, so that the stages behind the reader get their share."""
    matches = [match for match in NUMBER.finditer(text) if FINITE.fullmatch(match.group())]
    if not matches:
        return text
    match = chance.choice(matches)
    factor = chance.choice((0.1, 0.5, 0.999, 1.001, 2, 3, 10, 1000, -1))
    number = float(match.group()) * factor
    nudged = str(int(number)) if match.group().isdigit() and number == int(number) else repr(number)
    return text[: match.start()] + nudged + text[match.end() :]


def _other_word(chance: random.Random, text: str) -> str:
    words = chance.choice((METHODS, FAMILIES, tuple(BLOCK_TYPES), ("half", "full"), ("nearest", "floor", "even")))
    places = [match for word in words for match in re.finditer(f'"{word}"', text)]
    if not places:
        return text
    match = chance.choice(places)
    return f'{text[: match.start()]}"{chance.choice(words)}"{text[match.end() :]}'


def _misspell_key(chance: random.Random, text: str) -> str:
    matches = list(KEY.finditer(text))
    if not matches:
        return text
    start, end = chance.choice(matches).span(2)
    place = chance.randrange(start, end)
    return text[:place] + chance.choice(["", "x", "_", "é", '"', "."]) + text[place + chance.randrange(2) :]


def _delete_lines(chance: random.Random, text: str) -> str:
    lines = text.splitlines(keepends=True)
    if lines:
        start = chance.randrange(len(lines))
        del lines[start : start + chance.choice((1, 1, 2, 5))]
    return "".join(lines)


def _repeat_line(chance: random.Random, text: str) -> str:
    lines = text.splitlines(keepends=True)
    if lines:
        lines.insert(chance.randrange(len(lines)), chance.choice(lines))
    return "".join(lines)


def _truncate(chance: random.Random, text: str) -> str:
    return text[: chance.randrange(len(text) + 1)]


def _noise(chance: random.Random, text: str) -> str:
    place = chance.randrange(len(text) + 1)
    return text[:place] + chance.choice(NOISE) + text[place + chance.randrange(2) :]


def _byte_noise(chance: random.Random, text: str) -> str:
    raw = bytearray(text.encode("utf-8", "surrogatepass"))
    for _ in range(chance.choice((1, 3))):
        if raw:
            raw[chance.randrange(len(raw))] = chance.randrange(256)
    return raw.decode("utf-8", chance.choice(("replace", "surrogateescape")))


CHANGES: list[Callable[[random.Random, str], str]] = [
    _swap_tokens,
    _delete_token,
    _replace_match(NUMBER, NUMBERS),
    _replace_match(NUMBER, VALUES),
    _replace_match(re.compile(r'"[^"\n]*"'), VALUES + NUMBERS),
    _replace_match(re.compile(r"\[[^\[\]\n]*\]"), VALUES + NUMBERS),
    *([_nudge_number] * 5),
    *([_other_word] * 3),
    _misspell_key,
    _delete_lines,
    _repeat_line,
    _truncate,
    _noise,
    _byte_noise,
]


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--count", type=int, default=20000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--through", choices=("read", "check"), default="read")
    parser.add_argument("--keep-going", action="store_true", help="print what fails and go on")
    options = parser.parse_args()
    warnings.simplefilter("error")
    outcomes: Counter[str] = Counter()
    failures = 0
    for number, text in enumerate(mutations(options.seed, options.count)):
        start = process_time()
        try:
            with time_limit(TIME_LIMIT_S):
                outcome = _outcome(text, number, options.through)
        except Exception as error:
            failures += 1
            print(f"seed {options.seed}, text {number}: {type(error).__name__}: {error}\n{text!r}", flush=True)
            if not options.keep_going:
                raise
            continue
        outcomes[outcome] += 1
        seconds = process_time() - start
        if outcome == "uncertified" or seconds > SLOW_S:
            print(f"seed {options.seed}, text {number}: {outcome} after {seconds:.1f} s\n{text!r}", flush=True)
    ends = ", ".join(f"{times} {outcome}" for outcome, times in sorted(outcomes.items()))
    print(f"{options.count} mutated designs, seed {options.seed}: {ends}; {failures} failures")
    raise SystemExit(failures > 0)


def _outcome(text: str, number: int, through: str) -> str:
    readable = judge(text)
    if through == "read":
        return "read" if readable else "unreadable"
    if number % COMMAND_LINE_SHARE == 0:
        with TemporaryDirectory() as folder:
            through_command_line(text, Path(folder))
    return walk(text)


if __name__ == "__main__":
    main()
