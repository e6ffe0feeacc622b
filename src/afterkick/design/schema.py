"""The design file as frozen classes, one a table and one a block type; the fields are exactly the TOML keys.

Limits of single values are annotations (see ``limits``), rules between keys are in ``rules``.  Every number is the
exact rational that the file shows.
"""

from typing import Annotated, ClassVar, TypeAlias, get_args

from attrs import field, frozen
from flint import fmpq

from afterkick.design.limits import (
    HIGHEST_ORDER,
    Choice,
    FeedbackOrder,
    Identifier,
    Items,
    Line,
    Number,
    Polynomial,
    TargetName,
    Whole,
)

__all__ = [
    "BLOCK_TYPES",
    "FAMILIES",
    "HIGHEST_ORDER",
    "INSTEAD",
    "METHODS",
    "MODEL_FORMS",
    "SCALINGS",
    "STRUCTURES",
    "Arithmetic",
    "Bandpass",
    "Bandstop",
    "Block",
    "BlocksForm",
    "Budget",
    "DeadTime",
    "Design",
    "Gain",
    "Highpass",
    "Identity",
    "Integrator",
    "Lag",
    "LeadLag",
    "Lowpass",
    "MatricesForm",
    "ModelForm",
    "Notch",
    "OdeForm",
    "Pid",
    "Ratio",
    "RatioForm",
    "RcHighpass",
    "RcLowpass",
    "Resonator",
    "RootsForm",
    "Sampling",
    "SecondOrder",
    "Signal",
    "Signals",
    "Target",
]

METHODS = (
    "zero-order-hold",
    "first-order-hold",
    "impulse-invariant",
    "bilinear",
    "matched",
    "backward-difference",
)
FAMILIES = ("butterworth", "bessel", "chebyshev", "inverse-chebyshev", "elliptic")
STRUCTURES = ("direct", "transposed", "delta", "coupled", "parallel", "auto")
SCALINGS = ("peak-gain", "two-norm", "infinity", "none")

MOST_BLOCKS = 32

ZERO = fmpq(0)
ONE = fmpq(1)

INSTEAD = "instead"
"""Field metadata: the key that may be written instead of the field's own, and what makes the field of its value."""

Positive: TypeAlias = Annotated[fmpq, Number(above=0)]
NotNegative: TypeAlias = Annotated[fmpq, Number(least=0)]
Nonzero: TypeAlias = Annotated[fmpq, Number(nonzero=True)]
# 10^(dB/20) must stay a number that can be computed with.
Decibels: TypeAlias = Annotated[fmpq, Number(above=0, most=400)]
Coefficients: TypeAlias = Annotated[tuple[fmpq, ...], Polynomial(lowest_order=0)]
Order1Up: TypeAlias = Annotated[tuple[fmpq, ...], Polynomial(lowest_order=1)]
Vector: TypeAlias = Annotated[tuple[fmpq, ...], Items(1, HIGHEST_ORDER, "numbers")]
UpperHalf: TypeAlias = Annotated[fmpq, Number(least=0, remedy="of a conjugate pair write the one with im > 0")]
Root: TypeAlias = Annotated[tuple[fmpq, UpperHalf], Items(2, 2, "numbers, [re, im]", "write a real root as [re, 0.0]")]
FilterOrder: TypeAlias = Annotated[int, Whole(1, HIGHEST_ORDER)]
BandOrder: TypeAlias = Annotated[int, Whole(1, HIGHEST_ORDER // 2)]
Family: TypeAlias = Annotated[str, Choice(FAMILIES)]
WordBits: TypeAlias = Annotated[int, Whole(8, 32)]


@frozen
class Identity:
    """[design]: the C prefix, and a title of one printable line that may hold quotes, braces and comment ends."""

    name: Annotated[str, Identifier()]
    title: Annotated[str, Line(shortest=1)] = ""
    """Never empty: a design without a title is called by its name."""

    def __attrs_post_init__(self) -> None:
        object.__setattr__(self, "title", self.title or self.name)


@frozen
class OdeForm:
    """a_n y^(n) + ... + a_0 y = b_m u^(m) + ... + b_0 u."""

    kind: ClassVar[str] = "ode"
    output: Order1Up
    """a_n ... a_0, highest derivative first; 2 to 17 of them."""
    input: Coefficients
    """b_m ... b_0; m may exceed n, which the sampling method must be able to take."""
    before: Annotated[tuple[fmpq, ...], Items(0, HIGHEST_ORDER, "numbers")] = ()
    """y, y', ..., y^(n-1) at t = 0-; what is not given is 0, so there are always n."""

    def __attrs_post_init__(self) -> None:
        missing = len(self.output) - 1 - len(self.before)
        object.__setattr__(self, "before", self.before + (ZERO,) * missing)


@frozen
class RatioForm:
    """numerator(s) / denominator(s), coefficients of powers of s, highest first."""

    kind: ClassVar[str] = "ratio"
    numerator: Coefficients
    denominator: Order1Up


@frozen
class RootsForm:
    """gain * prod(s - zero) / prod(s - pole), with one root (re, im), im >= 0, written of each conjugate pair."""

    kind: ClassVar[str] = "roots"
    poles: Annotated[tuple[Root, ...], Items(1, HIGHEST_ORDER, "roots, each [re, im]")]
    zeros: Annotated[tuple[Root, ...], Items(0, HIGHEST_ORDER, "roots, each [re, im]")] = ()
    gain: Nonzero = ONE
    unit: Annotated[str, Choice(("rad/s", "Hz"))] = "rad/s"


@frozen
class MatricesForm:
    """x' = a x + b u, y = c x + d u, with n states: a is n rows of n, b and c have n numbers."""

    kind: ClassVar[str] = "matrices"
    a: Annotated[tuple[Vector, ...], Items(1, HIGHEST_ORDER, "rows, each a list of numbers")]
    b: Vector
    c: Vector
    d: fmpq = ZERO


@frozen
class Gain:
    type: ClassVar[str] = "gain"
    gain: Nonzero


@frozen
class Integrator:
    type: ClassVar[str] = "integrator"
    gain: Nonzero = ONE


@frozen
class Lag:
    """Exactly one of the two keys."""

    type: ClassVar[str] = "lag"
    time_constant_s: Positive | None = None
    corner_hz: Positive | None = None


@frozen
class LeadLag:
    type: ClassVar[str] = "lead-lag"
    zero_hz: Positive
    pole_hz: Positive
    gain: Nonzero = ONE


@frozen
class Lowpass:
    type: ClassVar[str] = "lowpass"
    family: Family
    order: FilterOrder
    corner_hz: Positive
    ripple_db: Decibels | None = None
    stop_db: Decibels | None = None


@frozen
class Highpass:
    type: ClassVar[str] = "highpass"
    family: Family
    order: FilterOrder
    corner_hz: Positive
    ripple_db: Decibels | None = None
    stop_db: Decibels | None = None


@frozen
class Bandpass:
    """``order`` is that of the low-pass prototype: the filter has twice as many poles."""

    type: ClassVar[str] = "bandpass"
    family: Family
    order: BandOrder
    low_hz: Positive
    high_hz: Positive
    ripple_db: Decibels | None = None
    stop_db: Decibels | None = None


@frozen
class Bandstop:
    """``order`` is that of the low-pass prototype: the filter has twice as many poles."""

    type: ClassVar[str] = "bandstop"
    family: Family
    order: BandOrder
    low_hz: Positive
    high_hz: Positive
    ripple_db: Decibels | None = None
    stop_db: Decibels | None = None


@frozen
class SecondOrder:
    type: ClassVar[str] = "second-order"
    corner_hz: Positive
    quality: Positive


@frozen
class Notch:
    type: ClassVar[str] = "notch"
    center_hz: Positive
    quality: Positive
    depth_db: Decibels | None = None
    """How far the centre is lowered; None for a zero on the imaginary axis."""


@frozen
class Resonator:
    type: ClassVar[str] = "resonator"
    center_hz: Positive
    bandwidth_hz: Positive
    gain: Nonzero = ONE


@frozen
class Pid:
    """kp + ki/s + kd s, the last one with a lag at ``derivative_corner_hz`` where that is given."""

    type: ClassVar[str] = "pid"
    kp: fmpq = ZERO
    ki: fmpq = ZERO
    kd: fmpq = ZERO
    derivative_corner_hz: Positive | None = None


@frozen
class Ratio:
    type: ClassVar[str] = "ratio"
    numerator: Coefficients
    denominator: Coefficients


@frozen
class RcLowpass:
    type: ClassVar[str] = "rc-lowpass"
    ohm: Positive
    farad: Positive


@frozen
class RcHighpass:
    type: ClassVar[str] = "rc-highpass"
    ohm: Positive
    farad: Positive


@frozen
class DeadTime:
    type: ClassVar[str] = "dead-time"
    delay_s: NotNegative


Block: TypeAlias = (
    Gain
    | Integrator
    | Lag
    | LeadLag
    | Lowpass
    | Highpass
    | Bandpass
    | Bandstop
    | SecondOrder
    | Notch
    | Resonator
    | Pid
    | Ratio
    | RcLowpass
    | RcHighpass
    | DeadTime
)
BLOCK_TYPES: dict[str, type] = {block.type: block for block in get_args(Block)}


@frozen
class BlocksForm:
    """The product of the blocks; the order of the whole is judged where the model is built."""

    kind: ClassVar[str] = "blocks"
    block: Annotated[
        tuple[Block, ...], Items(1, MOST_BLOCKS, "[[model.block]] tables", "write [[model.block]] above each block")
    ]


ModelForm: TypeAlias = OdeForm | RatioForm | RootsForm | MatricesForm | BlocksForm
MODEL_FORMS: dict[str, type] = {form.kind: form for form in get_args(ModelForm)}


def _reciprocal(value: fmpq) -> fmpq:
    return 1 / value


@frozen
class Sampling:
    """[sampling]; a ``period_s`` in the file has become its reciprocal ``rate_hz``.

    An option is None where the file doesn't give it: ``first_sample`` then means "half", ``zeros_at_infinity``
    "half-rate", and ``match_hz`` K = 2/T for ``bilinear`` and DC for ``matched``.
    """

    rate_hz: Positive = field(metadata={INSTEAD: ("period_s", _reciprocal)})
    method: Annotated[str, Choice(METHODS)]
    match_hz: Positive | None = None
    first_sample: Annotated[str, Choice(("half", "full"))] | None = None
    zeros_at_infinity: Annotated[str, Choice(("half-rate", "delay"))] | None = None


@frozen
class Signal:
    """``full_scale`` and ``peak`` in ``unit``; ``peak`` is for the input only."""

    unit: Annotated[str, Line()] = ""
    full_scale: Positive = ONE
    peak: Positive | None = None

    @property
    def peak_or_full_scale(self) -> fmpq:
        """The largest magnitude that is promised."""
        return self.full_scale if self.peak is None else self.peak


@frozen
class Signals:
    input: Signal = Signal()
    output: Signal = Signal()


@frozen
class Arithmetic:
    kind: Annotated[str, Choice(("fixed", "float32"))] = "fixed"
    data_bits: WordBits = 16
    coefficient_bits: WordBits = 16
    structure: Annotated[str, Choice(STRUCTURES)] = "direct"
    rounding: Annotated[str, Choice(("nearest", "floor", "even"))] = "nearest"
    overflow: Annotated[str, Choice(("saturate", "wrap"))] = "saturate"
    carry: Annotated[bool | int, FeedbackOrder()] = False
    """The order of the error feedback: False or 1 or 2; True becomes 1."""
    state_bits: Annotated[int, Whole(8, 64)] | None = None
    accumulator_bits: Annotated[int, Choice((32, 64))] | None = None
    scaling: Annotated[str, Choice(SCALINGS)] = "peak-gain"
    clamp: Annotated[tuple[fmpq, fmpq], Items(2, 2, "numbers, [low, high]")] | None = None
    flush_below: Positive | None = None
    """Single precision only: states below it are set to zero, in output units of their section."""
    relax: bool = False
    """Whether what the bounds prove idle is left out; the code then relies on the input's peak."""

    def __attrs_post_init__(self) -> None:
        if self.carry is True:
            object.__setattr__(self, "carry", 1)


@frozen
class Target:
    name: Annotated[str, TargetName()] = "host"


@frozen
class Budget:
    """Each limit is None where the file doesn't give it, and then is not judged."""

    impulse_peak_percent: NotNegative | None = None
    impulse_rms_percent: NotNegative | None = None
    magnitude_db: NotNegative | None = None
    phase_deg: NotNegative | None = None
    band_hz: Positive | None = None
    """Up to where ``magnitude_db`` and ``phase_deg`` hold."""
    worst_case_counts: NotNegative | None = None
    noise_counts: NotNegative | None = None
    dead_band_counts: NotNegative | None = None
    dc_gain_ppm: NotNegative | None = None
    instructions: NotNegative | None = None


@frozen
class Design:
    """A whole design file."""

    design: Identity
    model: ModelForm
    sampling: Sampling
    signals: Signals = Signals()
    arithmetic: Arithmetic = Arithmetic()
    target: Target = Target()
    budget: Budget = Budget()
