"""HTML from plain text: every string is escaped unless it is already markup."""

from __future__ import annotations

from collections.abc import Iterable
from html import escape

_VOID = frozenset({"img", "meta", "br"})


class Markup(str):
    """Text that is already HTML; nothing but this module and constants of ours makes it."""

    __slots__ = ()


def el(tag: str, *children: str, **attributes: str) -> Markup:
    """An element. Children that are not `Markup` are escaped, attributes always; `class_` stands for `class`."""
    inner = "".join(c if isinstance(c, Markup) else escape(c) for c in children)
    attrs = "".join(f' {k.rstrip("_").replace("_", "-")}="{escape(v, quote=True)}"' for k, v in attributes.items())
    return Markup(f"<{tag}{attrs}>" if tag in _VOID else f"<{tag}{attrs}>{inner}</{tag}>")


def join(parts: Iterable[Markup]) -> Markup:
    """Markup after markup."""
    return Markup("".join(parts))


def table(
    head: Iterable[str],
    rows: Iterable[Iterable[str]],
    *,
    caption: str = "",
    numeric: Iterable[int] = (),
    wordy: Iterable[int] = (),
) -> Markup:
    """A table that scrolls sideways on a narrow screen.

    `numeric` columns are set flush right and never broken, `wordy` ones keep room for a few words.
    """
    kinds = {k: {"class_": "n"} for k in numeric} | {k: {"class_": "w"} for k in wordy}

    def cells(tag: str, row: Iterable[str], **attributes: str) -> Markup:
        return el("tr", join(el(tag, c, **attributes, **kinds.get(k, {})) for k, c in enumerate(row)))

    body = [cells("td", row) for row in rows]
    title = [el("caption", caption)] if caption else []
    inner = join([*title, el("thead", cells("th", head, scope="col")), el("tbody", join(body))])
    return el("div", el("table", inner), class_="scroll", tabindex="0", role="group")
