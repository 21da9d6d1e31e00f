"""The sheet one takes to the hood, from the stored document."""
