"""A person's note as HTML that cannot do anything: Markdown without HTML in it, links to http and https alone."""

from __future__ import annotations

from functools import cache

import nh3
from markdown_it import MarkdownIt

# CommonMark with tables and struck-out text. Pictures are left out: one from elsewhere tells its server who reads.
_TAGS = {
    "p", "br", "hr", "em", "strong", "s", "code", "pre", "blockquote", "ul", "ol", "li", "a", "h1", "h2", "h3", "h4",
    "h5", "h6", "table", "thead", "tbody", "tr", "th", "td",
}  # fmt: skip


@cache
def _reader() -> MarkdownIt:
    return (
        MarkdownIt("commonmark", {"html": False, "linkify": False}).enable(["table", "strikethrough"]).disable("image")
    )


def _whole_address(tag: str, attribute: str, value: str) -> str | None:
    """A link only to a whole address: one without a scheme would lead somewhere on this server, or to any other."""
    if attribute == "href" and not value.lower().startswith(("http://", "https://")):
        return None
    return value


def note_html(text: str) -> str:
    """The note as HTML for the page.

    Raw HTML in it is shown as it was typed. What the Markdown reader lets through is cleaned once more by a list of
    what is allowed, so that a fault in one of the two is not enough.
    """
    return nh3.clean(
        _reader().render(text),
        tags=_TAGS,
        attributes={"a": {"href"}, "ol": {"start"}, "th": set(), "td": set()},
        url_schemes={"http", "https"},
        attribute_filter=_whole_address,
        link_rel="noopener noreferrer nofollow",
        set_tag_attribute_values={"a": {"target": "_blank"}},
    )
