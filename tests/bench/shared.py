"""What the tests of the bench share: the cores, and random programs of every structure."""

import random
from functools import cache

from attrs import evolve
from flint import fmpq

from afterkick.bench import Bench, bench
from afterkick.emit import emit_c
from afterkick.errors import Refused
from afterkick.fixed.carry import with_carry
from afterkick.fixed.program import Program
from afterkick.fixed.ranges import require_valid
from afterkick.targets import find_target
from fixed.carried_designs import relaxed_programs
from fixed.structure_designs import BUILD, HALF, MODELS, at, build
from floating.random_filters import random_filter

CORES = ("armv6-m", "armv7e-m", "armv7e-m-fp", "rv32imc")
KINDS = (*BUILD, "preset", "relaxed", "float32")
SAMPLES = 3000


def _attempt(draw: random.Random, structure: str) -> Program:
    model = draw.choice([name for name in MODELS if name != "low-pass 16"])
    program = build(
        structure,
        at(model, draw.choice((7, 20, 60, 200)), draw.choice(("zero-order-hold", "bilinear"))),
        HALF,
        data_bits=draw.choice((8, 12, 16, 16, 24, 32)),
        coefficient_bits=draw.choice((12, 16, 24, 32)),
        rounding=draw.choice(("nearest", "floor", "even")),
        overflow=draw.choice(("saturate", "saturate", "wrap")),
    )
    return with_carry(program, draw.choice((1, 2))) if draw.random() < 0.3 else program


def random_kind(kind: str, seed: int):
    """The first program of this kind and seed that is not refused."""
    draw = random.Random(f"{kind} {seed}")
    if kind == "float32":
        return random_filter(seed)[0]
    if kind == "relaxed":
        return evolve(relaxed_programs(seed + 1)[seed][2], name="probe")
    while True:
        try:
            if kind == "preset":
                program = build(
                    "parallel",
                    at(draw.choice(("integrator", "integrator, lag", "pi")), draw.choice((20, 200))),
                    data_bits=draw.choice((12, 16, 24)),
                    coefficient_bits=draw.choice((16, 24)),
                )
                assert program.preset is not None
            else:
                program = _attempt(draw, kind)
            require_valid(program)
            return program
        except Refused:
            continue


@cache
def gain_program(gain: int = 1) -> Program:
    """y = gain x: what its C comes to can be counted by hand."""
    from fixed.random_designs import program_of

    return program_of(([fmpq(gain)], []), name="plain")


def on(core: str, program, files: dict[str, str] | None = None, **options) -> Bench:
    return bench(files or emit_c(program), program, find_target(core), **{"samples": SAMPLES, **options})
