"""A page taken apart with the standard library's parser, for tests to look into.

Public names: `Document`, `read`.
"""

from dataclasses import dataclass, field
from html.parser import HTMLParser


@dataclass
class Document(HTMLParser):
    """Elements with their attributes, the texts of scripts and styles, and the text a reader sees."""

    elements: list[tuple[str, dict[str, str]]] = field(default_factory=list)
    raw: list[tuple[str, dict[str, str], str]] = field(default_factory=list)
    pieces: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        super().__init__()
        self._inside: tuple[str, dict[str, str]] | None = None

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = {name: value or "" for name, value in attrs}
        self.elements.append((tag, found))
        if tag in ("script", "style"):
            self._inside = tag, found
            self.raw.append((tag, found, ""))

    def handle_endtag(self, tag: str) -> None:
        if tag in ("script", "style"):
            self._inside = None

    def handle_data(self, data: str) -> None:
        if self._inside is None:
            self.pieces.append(data)
        else:
            tag, found, text = self.raw.pop()
            self.raw.append((tag, found, text + data))

    @property
    def text(self) -> str:
        """The text outside scripts and styles, blanks made single."""
        return " ".join(" ".join(self.pieces).split())

    def scripts(self) -> list[str]:
        """Return the texts of the scripts that run."""
        return [text for tag, found, text in self.raw if tag == "script" and "type" not in found]

    def data(self) -> str:
        """Return the JSON that the page draws from."""
        return next(text for _, found, text in self.raw if found.get("id") == "data")

    def styles(self) -> list[str]:
        """Return the texts of the style sheets."""
        return [text for tag, _, text in self.raw if tag == "style"]


def read(html: str) -> Document:
    """Parse a page."""
    document = Document()
    document.feed(html)
    document.close()
    return document
