"""The product: its store, the writing of whole units, and the register of what is done."""
