"""The store of past measurements and what they were charted by."""
