"""The shared look of every page: one style sheet, templates, and the call that renders them."""

from flows.pages.render import render_page

__all__ = ["render_page"]
