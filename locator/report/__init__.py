"""One self-contained page from the results."""
