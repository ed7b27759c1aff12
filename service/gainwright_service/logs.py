"""Logging of the processes: one JSON line per event on standard error. Tokens never pass here."""

from __future__ import annotations

import logging
import sys

import structlog


def set_up(process: str, level: str) -> structlog.stdlib.BoundLogger:
    """Configure logging for a process and give its logger."""
    logging.basicConfig(stream=sys.stderr, level=logging.WARNING, format="%(message)s")
    structlog.configure(
        processors=[
            structlog.contextvars.merge_contextvars,
            structlog.processors.add_log_level,
            structlog.processors.TimeStamper(fmt="iso", utc=True),
            structlog.processors.format_exc_info,
            structlog.processors.JSONRenderer(),
        ],
        wrapper_class=structlog.make_filtering_bound_logger(logging.getLevelName(level.upper())),
        logger_factory=structlog.PrintLoggerFactory(sys.stderr),
    )
    logger: structlog.stdlib.BoundLogger = structlog.get_logger(process=process)
    return logger
