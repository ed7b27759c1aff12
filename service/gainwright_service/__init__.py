"""The service."""
