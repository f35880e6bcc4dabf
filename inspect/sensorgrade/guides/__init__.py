"""The guides, as Markdown, and how they are found by topic."""
