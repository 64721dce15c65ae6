"""HTML as text that knows it is markup: whatever is not, is escaped when it is put in."""

import html


class Markup(str):
    """Text that is HTML already."""

    __slots__ = ()


Child = str | int | float | None
VOID = frozenset({"meta", "link", "img", "input", "br"})


def escaped(text: object) -> Markup:
    """Text as HTML that shows it; Markup stays as it is."""
    return text if isinstance(text, Markup) else Markup(html.escape("".join(map(_shown, str(text)))))


def _shown(character: str) -> str:
    """A character that HTML may hold; controls and lone surrogates become the replacement character."""
    allowed = character in "\t\n" or (ord(character) >= 32 and not 0x7F <= ord(character) < 0xA0
                                      and not 0xD800 <= ord(character) < 0xE000)  # fmt: skip
    return character if allowed else "\N{REPLACEMENT CHARACTER}"


def tag(name: str, /, *children: Child, **attributes: Child | bool) -> Markup:
    """An element. In attribute names a trailing underscore falls away and others become hyphens; True: no value,
    None and False: left out."""
    told = "".join(f" {key.rstrip('_').replace('_', '-')}" + ("" if value is True else f'="{escaped(value)}"')
                   for key, value in attributes.items() if value is not None and value is not False)
    inside = joined(*children)
    return Markup(f"<{name}{told}>" if name in VOID and not inside else f"<{name}{told}>{inside}</{name}>")


def joined(*children: Child) -> Markup:
    """Children one after the other."""
    return Markup("".join(escaped(child) for child in children if child is not None))
