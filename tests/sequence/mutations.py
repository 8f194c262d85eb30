"""Edits that turn a good file into a strange one; shared by the fuzz test and the long proof."""

import random
import re
from collections.abc import Callable

TOKENS = (
    '"25 s"', "1e308", "-1", "0", "1e12", "nan", "inf", "true", '""', "[]", "{}", '"hold"', '"2*hold"', '"1/0 s"',
    '"9 Er"', '"-5 us"', "999999999999999999999999", '"10**10"', '"((((("', '"hold/(hold-hold)"', "[[1]]",
    '"' + "9" * 300 + ' s"', "{ from = 1, to = 1e9, step = 1e-9 }", "{ from = 1, to = 2, count = 1000000000000 }",
    '"1e300 s"', '"nan s"', '"µ"', "1979-05-27", '"\\u0000"', "0x7fffffffffffffff", "a.b.c = 1", "[settings]",
    "[[stages]]", '"deg"', '"sqrt(hold*hold)"', "{ from = 0.2, to = 40, count = 30000 }", "100000",
)  # fmt: skip
CHARACTERS = "\"'[]{}=,.#\n\t \\0aZ9é\x00\u2028+-*/()%"


def _replace_value(text: str, rng: random.Random) -> str:
    places = [match.span(1) for match in re.finditer(r"= *([^\n,}\]]+)", text)]
    if not places:
        return text
    start, end = rng.choice(places)
    return text[:start] + rng.choice(TOKENS) + text[end:]


def _replace_number(text: str, rng: random.Random) -> str:
    places = [match.span() for match in re.finditer(r"\d+(\.\d+)?", text)]
    if not places:
        return text
    start, end = rng.choice(places)
    return text[:start] + rng.choice(("0", "-1", "1e9", "1e-30", "7", "0.1", "1000000", "1e400")) + text[end:]


def _edit_character(text: str, rng: random.Random) -> str:
    at = rng.randrange(len(text) + 1)
    return text[:at] + rng.choice(CHARACTERS) + text[at + rng.randrange(2) :]


def _edit_lines(text: str, rng: random.Random) -> str:
    lines = text.split("\n")
    one, two = rng.randrange(len(lines)), rng.randrange(len(lines))
    kind = rng.randrange(4)
    if kind == 0:
        del lines[one]
    elif kind == 1:
        lines.insert(two, lines[one])
    elif kind == 2:
        lines[one], lines[two] = lines[two], lines[one]
    else:
        lines[one] = lines[one] * rng.randrange(1, 40)
    return "\n".join(lines)


def _swap_words(text: str, rng: random.Random) -> str:
    words = re.findall(r"[A-Za-z_]{2,}", text)
    if not words:
        return text
    return text.replace(rng.choice(words), rng.choice(words), rng.choice((1, -1)))


def _cut(text: str, rng: random.Random) -> str:
    at = rng.randrange(len(text) + 1)
    return text[:at] if rng.random() < 0.5 else text[at:]


def _pile_up(text: str, rng: random.Random) -> str:
    at = rng.randrange(len(text) + 1)
    return (
        text[:at] + rng.choice(("[", "{", "a.", "((", '"', "#", "\n[[stages]]\n")) * rng.randrange(1, 3000) + text[at:]
    )


def _grow(text: str, rng: random.Random) -> str:
    """A plan as large as the language allows, or larger."""
    return re.sub(r"repeats = \d+", f"repeats = {rng.choice((1000, 30_000, 300_000, 4_000_000))}", text)


EDITS: tuple[tuple[Callable[[str, random.Random], str], int], ...] = (
    (_replace_value, 8), (_replace_number, 8), (_edit_character, 4), (_edit_lines, 4), (_swap_words, 4), (_cut, 1),
    (_pile_up, 1), (_grow, 1),
)  # fmt: skip


def mutated(text: str, rng: random.Random) -> str:
    """`text` after one to four random edits."""
    edits, weights = zip(*EDITS, strict=True)
    for edit in rng.choices(edits, weights, k=rng.randrange(1, 5)):
        text = edit(text, rng)
    return text
