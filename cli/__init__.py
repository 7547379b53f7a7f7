"""People: commands, tables, pictures and files."""
