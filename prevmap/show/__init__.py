"""What people look at: maps, charts and the report; no statistics are computed here."""
