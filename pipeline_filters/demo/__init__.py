"""A small invented recording, filtered, measured and drawn.

| module | what it is |
|---|---|
| recording | the invented recording, and what is known of it; as a Zarr store |
| spec_text | the spec that filters it |
| folder | what lies where, and whose a folder is |
| story | what the filter did, measured on the product |
| spectra | levels over frequency, of stretches with missing samples |
| picture | the story in one picture |
| telling | all of it, one after another |
"""
