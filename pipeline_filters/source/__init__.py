"""The source: opened, fitted to the spec's signals, its time axis checked, read in slabs.

| module | what it is |
|---|---|
| zarr_source | a Zarr store: `open_zarr_source` |
| dataset_source | an xarray Dataset: `open_dataset_source` (the only module with xarray) |
| readers | what both give: `SignalReader`, `Source`, `rows_of` |
| offers | what a source offers: arrays by their names |
| fitting, channels | whether a variable is what a signal says; its channels |
| stored_array | one array of a store, its broken chunks named |
| axis, axis_scan | the checked time axis, and the streamed check |
| cf_time, calendars, exact | stamps as integer nanoseconds, exactly |
| decoding, cf_attributes | raw samples to values; what CF attributes say of them |
| screening | samples that the spec's policies refuse |
"""
