"""One result's chain: responses, timing and ends become stages with reach and blocks.

| module | what it is |
|---|---|
| model | the chain as workers need it |
| blocks | hop and transform length |
| building | designs joined into chains, and checked |
"""
