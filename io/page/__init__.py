"""The page: one HTML file per run, self-contained, with the small model evaluated in the reader's browser."""

from modesieve.io.page.build import Words, page_text
from modesieve.io.page.words import page_words, report_lines, reproduce

__all__ = ["Words", "page_text", "page_words", "report_lines", "reproduce"]
