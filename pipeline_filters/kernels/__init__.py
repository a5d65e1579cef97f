"""The numpy kernels: arrays in, arrays out, no files, no graph.

Each kernel is a plain value with ``push(slab) -> results so far`` and
``finish() -> the rest``. It can be copied, pickled and compared, and what it holds
between two calls is its carry. Rows are channels; columns are samples in time.
"""
