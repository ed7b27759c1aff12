"""Options that several commands share."""

from __future__ import annotations

from typing import Annotated

import typer

AsJson = Annotated[bool, typer.Option("--json", help="Print one JSON document in place of text.")]
Url = Annotated[
    str | None, typer.Option("--url", help="Address of the service; else GAINWRIGHT_URL, else http://127.0.0.1:8765.")
]
Token = Annotated[
    str | None, typer.Option("--token", help="A person's token; else GAINWRIGHT_TOKEN, else the data folder's first.")
]
DataDir = Annotated[
    str | None,
    typer.Option("--data-dir", help="Where the data lies; else GAINWRIGHT_DATA_DIR, else ./gainwright-data."),
]
DatabaseUrl = Annotated[
    str | None,
    typer.Option("--database-url", help="The database; else GAINWRIGHT_DATABASE_URL, else a file in the data folder."),
]
