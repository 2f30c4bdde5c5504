"""One document, and the ways to read it: terminal text, JSON, CSV tables, paragraphs, HTML."""
