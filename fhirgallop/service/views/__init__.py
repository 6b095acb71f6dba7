"""What the pages for clinicians, operators and reviewers show, apart from how it is laid out."""
