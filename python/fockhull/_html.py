"""Tables for notebooks."""

from collections.abc import Iterable
from html import escape


def table(title: str, rows: Iterable[tuple[str, object]]) -> str:
    """Return a two-column HTML table with a caption."""
    body = "".join(
        f"<tr><th style='text-align:left'>{escape(name)}</th>"
        f"<td style='text-align:left'>{escape(str(value))}</td></tr>"
        for name, value in rows
    )
    return (
        "<table><caption style='caption-side:top;text-align:left;font-weight:bold'>"
        f"{escape(title)}</caption><tbody>{body}</tbody></table>"
    )
