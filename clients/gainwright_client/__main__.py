"""`python -m gainwright_client` is the `gainwright` command."""

from __future__ import annotations

from gainwright_client.commands import main

if __name__ == "__main__":
    main()
