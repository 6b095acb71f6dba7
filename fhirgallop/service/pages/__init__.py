"""Pages for people: templates and style apart from code."""
