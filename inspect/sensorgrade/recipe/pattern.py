"""Regular expressions that cannot be matched in bounded time, told before they are used."""

import re

TOKEN = re.compile(
    r"\\.|\[\^?\]?(?:\\.|[^\]\\])*\]|\(\?<?[=!]|\(\?P?<[^>]*>|\(\?[a-zA-Z-]*:|\(|\)"
    r"|\*|\+|\{\d*,\d*\}|\{\d+\}|\?|\||.",
    re.DOTALL,
)
REPEAT = re.compile(r"\*|\+|\{\d*,\d*\}|\{\d+\}")
ONCE = re.compile(r"\{0?,?[01]\}|\{1,1\}")
MOST_REPEATS = 8


def endless(pattern: str) -> str | None:
    """Why matching a (valid) pattern could take for ever, None where it cannot.

    A group that holds a repeat or alternatives must not itself be repeated: on names that almost
    match, the ways to split them grow exponentially with length. Many repeats one after the other
    grow as a high power, so their number is bounded too.
    """
    held = [False]  # for each open group: whether it holds a repeat or alternatives
    repeats = 0
    closed = False  # whether the last token closed a group that does
    for found in TOKEN.finditer(pattern):
        token = found[0]
        if token[0] == "(":
            held.append(False)
            closed = False
        elif token == ")":
            closed = held.pop() if len(held) > 1 else False
            held[-1] = held[-1] or closed
        elif REPEAT.fullmatch(token) and not ONCE.fullmatch(token):
            if closed:
                return (
                    f"could take for ever: {token} after a group that repeats or has alternatives;"
                    " take one of the repeats out"
                )
            repeats += 1
            held[-1] = True
        elif token == "|":
            held[-1] = True
            closed = False
        elif token != "?":
            closed = False
    if repeats > MOST_REPEATS:
        return f"could take for ever: {repeats} repeats in one pattern; at most {MOST_REPEATS}"
    return None
