"""One benchmark a file: ``TITLE`` (one line) and ``tables(watch: Stopwatch) -> Iterable[Table]``.

Nothing registers a benchmark but its file being here.
"""
