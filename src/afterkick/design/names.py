"""Which texts can be names: of a design, hence of C symbols and files, and of a target profile."""

import re

__all__ = ["IDENTIFIER_RULE", "TARGET_RULE", "identifier_fault", "is_target_name"]

LONGEST_NAME = 40

IDENTIFIER_RULE = (
    f"a C identifier of 1 to {LONGEST_NAME} ASCII letters, digits and single underscores that starts with a letter,"
    " ends with a letter or digit and is no word of C or C++"
)
TARGET_RULE = f'a profile name of 1 to {LONGEST_NAME} ASCII letters, digits, "-", "_" and ".", such as "host"'

# ISO/IEC 9899:1999, 6.4.1 (the keywords that start with an underscore can't be names anyway), and C23's additions.
C_KEYWORDS = """
    auto break case char const continue default do double else enum extern float for goto if inline int long register
    restrict return short signed sizeof static struct switch typedef union unsigned void volatile while
    alignas alignof bool constexpr false nullptr static_assert thread_local true typeof typeof_unqual
"""
# ISO/IEC 14882:2017, 5.11, tables 5 and 6.
CPP_KEYWORDS = """
    asm catch char16_t char32_t class const_cast decltype delete dynamic_cast explicit export friend mutable namespace
    new noexcept operator private protected public reinterpret_cast static_cast template this throw try typeid typename
    using virtual wchar_t and and_eq bitand bitor compl not not_eq or or_eq xor xor_eq
"""
# A file NAME.h in an include folder would hide the standard header of that name (ISO/IEC 9899:2011, 7.1.2).
STANDARD_HEADERS = """
    assert complex ctype errno fenv inttypes iso646 limits locale math setjmp signal stdalign stdarg stdatomic stdbool
    stddef stdint stdio stdlib stdnoreturn string tgmath threads time uchar wchar wctype
"""
# No file NAME.c can be made under these names on one widespread family of systems (common practice).
DEVICE_FILES = "con prn aux nul " + " ".join(f"{port}{digit}" for port in ("com", "lpt") for digit in range(1, 10))

KEYWORDS = frozenset((C_KEYWORDS + CPP_KEYWORDS).split())
HEADERS = frozenset(STANDARD_HEADERS.split())
DEVICES = frozenset(DEVICE_FILES.split())

SHAPE = re.compile(r"[A-Za-z][A-Za-z0-9_]*")
# NAME_t, NAME_MAX and the like must not be those of <stdint.h> (ISO/IEC 9899:1999, 7.26.8).
STANDARD_INTEGER = re.compile(r"u?int(_least|_fast)?[0-9]+|u?int(max|ptr)", re.IGNORECASE)
TARGET_SHAPE = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]*")


def identifier_fault(text: str) -> str | None:
    """Why ``text`` can't be the prefix of C and C++ symbols and the stem of file names; None where it can."""
    lower = text.lower()  # macros are upper case, and some file systems know no case
    if len(text) > LONGEST_NAME:
        return f"which has {len(text)} characters"
    if not SHAPE.fullmatch(text):
        return "which is no C identifier that starts with a letter"
    if "__" in text or text.endswith("_"):
        return "which would make symbols with two underscores in a row, reserved in C++"
    if lower in KEYWORDS:
        return "which is a keyword of C or C++"
    if lower in HEADERS:
        return "whose header would hide a header of the C standard library"
    if STANDARD_INTEGER.fullmatch(text):
        return "which is a name of the header stdint.h"
    if lower in DEVICES:
        return "which some systems don't accept as the name of a file"
    return None


def is_target_name(text: str) -> bool:
    """Whether ``text`` can be the stem of a profile's file, and can't lead out of the folder."""
    return len(text) <= LONGEST_NAME and TARGET_SHAPE.fullmatch(text) is not None
