"""The HTTP surface under `/v1`. Routers parse, call one function and render; no numerics, SQL or state in them."""
