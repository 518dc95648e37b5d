"""Names that would break a page, a picture or a spreadsheet if they were taken for anything but text."""

from __future__ import annotations

HOSTILE = {
    "script": "<script>document.title='broken'</script>",
    "closing": "</title></style></svg></td>--><img src=x>",
    "quotes": "\"'` onmouseover=\"alert(1)",
    "right to left": "\u202egnitcelloc \u05e9\u05dc\u05d5\u05dd",
    "emoji": "🚲👩‍🔧 bike",
    "formula": "=HYPERLINK(\"http://example.org\";\"x\")",
    "entity": "&lt;b&gt; &amp;amp;",
    "css": "</style><style>*{display:none}",
    "url": "javascript:alert(1)",
    "long": "w" * 10_000,
}
