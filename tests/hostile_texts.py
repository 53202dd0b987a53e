"""Texts that try to run, to break out, to climb or to hide, for every door of a campaign.

Each payload that would run sets ``window.ran``; each that would ask for something asks ``hostile.invalid``.
The shapes are common knowledge of web security (OWASP's Cross Site Scripting Prevention and CSV Injection
pages, Unicode's UTS #39 and TR36); the words are ours.
"""

from __future__ import annotations

RAN = "ran"
"""Name of the global that a payload would set."""
OUTSIDE = "hostile.invalid"
"""Host that a payload would reach."""

MARKUP = {
    "script": "<script>window.ran=1</script>",
    "closes_script": "</script><script>window.ran=1</script>",
    "closes_title": "</title></textarea></style><img src=x onerror=window.ran=1>",
    "attribute": '" onmouseover="window.ran=1" autofocus onfocus=\'window.ran=1\' x="',
    "single_quote": "' onclick='window.ran=1",
    "unquoted": "x onpointerover=window.ran=1 y",
    "image": "<img src=https://hostile.invalid/x onerror=window.ran=1>",
    "svg": "<svg onload=window.ran=1><animate onbegin=window.ran=1 attributeName=x>",
    "math": "<math><mtext><table><mglyph><style><img src=x onerror=window.ran=1>",
    "comment": "--><script>window.ran=1</script><!--",
    "cdata": "]]><script>window.ran=1</script>",
    "style": "</style><style>*{background:url(https://hostile.invalid/c)}</style>",
    "base": "<base href=https://hostile.invalid/><meta http-equiv=refresh content=0;url=//hostile.invalid>",
    "plotly_link": '<a href="javascript:window.ran=1">x</a><b>bold</b><br>',
    "entity": "&lt;script&gt;window.ran=1&lt;/script&gt; &#60;i&#62; &amp;amp;",
}
ADDRESSES = {
    "javascript": "javascript:window.ran=1",
    "javascript_mixed": "JaVa\tScRiPt:window.ran=1",
    "data": "data:text/html,<script>window.ran=1</script>",
    "no_scheme": "//hostile.invalid/x",
    "css": "x;background:url(//hostile.invalid/c);expression(window.ran=1)",
}
TEMPLATES = {
    "jinja": "{{ 7*191 }}{% for x in range(9) %}loop{% endfor %}{# gone #}",
    "format": "{module} {0} %s %(x)s ${window.ran=1} `${1}`",
    "latex": "\\input{/etc/passwd} $x_1^2$ 50% #1 a_b ~ \\write18{x} {",
}
NAMES = {
    "climbs": "../../../climbed",
    "windows_climb": "..\\..\\climbed",
    "absolute": "/climbed",
    "percent": "%00%2e%2e%2fclimbed",
    "proto": "__proto__",
    "constructor": "constructor",
    "device": "CON",
    "device_lower": "con",
    "long": "long name " + "m" * 180,
    "spaces": "two  words here",
    "chinese": "模块 一",
    "arabic": "وحدة ٣",
    "emoji": "🤖🧪",
    "sharp": "a#b?c=d&e;f,g|h",
    "number": "1e5",
    "not_a_number": "nan",
    "dot": ".",
}
FORMULAS = {
    "equals": '=HYPERLINK("https://hostile.invalid")',
    "plus": "+1+cmd|' /C calc'!A0",
    "minus": "-2+3+cmd|' /C calc'!A0",
    "at": "@SUM(1)",
    "tab": "\t=1+1",
    "return": "\r=1+1",
    "wide_equals": "＝1+1",
}
UNSEEN = {
    "override": "abc\u202edcba",
    "isolate": "a\u2067b",
    "zero_width": "a\u200bb\u2060",
    "line_separator": "a\u2028b\u2029c",
    "escape": "a\x1b[31mb\x07",
    "private": "gap\ue000|gap",
}
NUL = "a\0b"

TEXTS: dict[str, str] = {**MARKUP, **ADDRESSES, **TEMPLATES, **NAMES, **FORMULAS, **UNSEEN}
"""Every text but the one with NUL, which no CSV and no file name can hold."""

IDS: dict[str, str] = {**MARKUP, **ADDRESSES, **TEMPLATES, **NAMES}
"""Those that are taken as ids (blanks around them aside)."""

REFUSED: dict[str, str] = {**FORMULAS, **UNSEEN}
"""Those that are refused as ids; a tab or a return at the beginning is a blank around the formula."""
