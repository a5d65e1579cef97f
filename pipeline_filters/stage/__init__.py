"""The one place that joins spec, design, source, kernels and product.

| module | what it is |
|---|---|
| compiling | a spec's results, each with its chain, its reader and its place in a product |
| figures | what is known of a result before and after its run, as JSON |
| memory | how much a worker needs, and how many workers a budget holds |
| checking | `check`: the designs of a spec, held to what they promise |
| forecasting | `forecast`: what a run will cost |
| running | `run`: store to store |
| lazily | `compile_spec`: results as dask arrays |
"""
