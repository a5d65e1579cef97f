"""Dask: spans as tasks, the workers that run them, and lazy arrays for xarray users.

| module | what it is |
|---|---|
| span_tasks | one task a span, carries handed on within a group of channels |
| fork_server | the process that workers are forked from |
| workers | this process, or several beside it |
| lazy | results as dask arrays with the user's chunks |
"""
