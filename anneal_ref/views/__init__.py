"""Command line, tables, plots, page and demo: thin layers over the floors above."""
