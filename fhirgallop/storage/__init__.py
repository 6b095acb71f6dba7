"""Where examinations are kept: SQLAlchemy Core over SQLite or another database. Knows no stage."""
