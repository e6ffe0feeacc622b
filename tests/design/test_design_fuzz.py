"""A small part of the fuzz run; the whole of it is ``python tests/design/fuzz_designs.py``."""

from design.fuzz_designs import judge, mutations

SEED = 7
COUNT = 500


def test_mutated_designs_are_read_or_refused() -> None:
    accepted = 0
    for number, text in enumerate(mutations(SEED, COUNT)):
        try:
            accepted += judge(text)
        except Exception as error:
            raise AssertionError(f"text {number} of mutations({SEED}, {COUNT}): {text!r}") from error
    assert 0 < accepted < COUNT, "the mutations must make good files and bad ones"


def test_mutations_repeat() -> None:
    assert list(mutations(3, 20)) == list(mutations(3, 20))
