"""A small part of the fuzz runs; the whole of them is ``python tests/design/fuzz_designs.py``."""

import warnings

from design.fuzz_designs import TIME_LIMIT_S, judge, mutations, through_command_line, time_limit, walk

SEED = 7
COUNT = 500
WALKED = 300
COMMAND_LINE_STEP = 15


def test_mutated_designs_are_read_or_refused() -> None:
    accepted = 0
    for number, text in enumerate(mutations(SEED, COUNT)):
        try:
            accepted += judge(text)
        except Exception as error:
            raise AssertionError(f"text {number} of mutations({SEED}, {COUNT}): {text!r}") from error
    assert 0 < accepted < COUNT, "the mutations must make good files and bad ones"


def test_mutated_designs_walk_the_whole_road(tmp_path) -> None:
    outcomes = set()
    for number, text in enumerate(mutations(SEED + 1, WALKED)):
        folder = tmp_path / str(number)
        try:
            with time_limit(TIME_LIMIT_S), warnings.catch_warnings():
                warnings.simplefilter("error")
                outcomes.add(walk(text))
                if number % COMMAND_LINE_STEP == 0:
                    folder.mkdir()
                    through_command_line(text, folder)
        except Exception as error:
            raise AssertionError(f"text {number} of mutations({SEED + 1}, {WALKED}): {text!r}") from error
    assert {"unreadable", "refused", "holds"} <= outcomes


def test_mutations_repeat() -> None:
    assert list(mutations(3, 20)) == list(mutations(3, 20))
