"""The filter spec: its language, its checks, and the model that the rest works with."""
