"""The store: the only wire between the processes."""
