"""What a person reads: tables for a terminal, charts and the page."""
