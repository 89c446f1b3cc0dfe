"""Entry for `panel serve app`: one sheet for each visit."""

from sumwright.page import build_page

build_page().servable()
