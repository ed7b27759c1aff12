"""The HTTP contract of Gainwright: requests, replies and problem codes as pydantic models.

What one document can tell is checked here; what needs other facts is checked by the service's planning.
"""
