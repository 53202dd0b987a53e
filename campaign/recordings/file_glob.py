"""Patterns of file paths, ``trials/**/*.csv``, matched the same way on every system."""

from __future__ import annotations

import re
from functools import lru_cache


@lru_cache(maxsize=256)
def glob_expression(pattern: str) -> re.Pattern[str]:
    """Translate a pattern into a regular expression for a whole path with forward slashes.

    ``**/`` stands for any folders or none, ``*`` for any characters but a slash, ``?`` for one of them,
    ``[…]`` for one of those listed. Names that begin with a dot are matched only where the pattern spells the
    dot (systems hide such files, and leave them behind).
    """
    parts: list[str] = []
    at = 0
    while at < len(pattern):
        fresh = at == 0 or pattern[at - 1] == "/"
        if pattern.startswith("**/", at) and fresh:
            parts.append(r"(?:[^/.][^/]*/)*")
            at += 3
        elif pattern.startswith("**", at):
            parts.append(r"(?:[^/.][^/]*/)*[^/.][^/]*" if fresh else r"[^/]*")
            at += 2
        else:
            part, at = _one_part(pattern, at, fresh)
            parts.append(part)
    return re.compile("".join(parts), re.DOTALL)


def _one_part(pattern: str, at: int, fresh: bool) -> tuple[str, int]:
    not_hidden = r"(?!\.)" if fresh else ""
    character = pattern[at]
    if character == "*":
        return f"{not_hidden}[^/]*", at + 1
    if character == "?":
        return f"{not_hidden}[^/]", at + 1
    if character == "[" and (end := pattern.find("]", at + 2)) > 0:
        inside = pattern[at + 1 : end].replace("\\", r"\\").replace("[", r"\[")
        inside = "^" + inside[1:] if inside.startswith("!") else inside
        return f"{not_hidden}(?!/)[{inside}]", end + 1
    return re.escape(character), at + 1


def matches_glob(path: str, pattern: str) -> bool:
    """Whether a path from the campaign folder, with forward slashes, matches a pattern as a whole."""
    return glob_expression(pattern).fullmatch(path) is not None


def leaves_the_folder(pattern: str) -> bool:
    """Whether a pattern points out of the campaign folder (absolute, or climbing with ``..``)."""
    return pattern.startswith(("/", "\\")) or ".." in re.split(r"[/\\]", pattern) or pattern[1:2] == ":"
