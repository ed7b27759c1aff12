"""The clients."""
