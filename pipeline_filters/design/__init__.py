"""The design of filters: one family of methods a file, an explicit registry of them all."""
