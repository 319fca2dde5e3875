"""Snakemake's logger plugin of this program: events to the display, the whole log to a file."""

from __future__ import annotations

import logging
import sys
from dataclasses import dataclass, field
from typing import Any, TextIO

from snakemake_interface_logger_plugins.base import LogHandlerBase
from snakemake_interface_logger_plugins.registry import LoggerPluginRegistry
from snakemake_interface_logger_plugins.settings import LogHandlerSettingsBase

from stook.engine.progress import Display, State

NAME = "stook"


@dataclass
class LogHandlerSettings(LogHandlerSettingsBase):
    """The objects of a run that the events go to."""

    state: State | None = field(default=None, metadata={"help": "what has happened so far"})
    display: Display | None = field(default=None, metadata={"help": "the moving line"})
    log: TextIO | None = field(default=None, metadata={"help": "the whole log"})


class LogHandler(LogHandlerBase):
    """Hands every event to the state and the display of the run, and writes it to the log."""

    settings: LogHandlerSettings

    @property
    def writes_to_stream(self) -> bool:
        """It does, so that Snakemake writes nothing to the terminal itself."""
        return True

    @property
    def writes_to_file(self) -> bool:
        """Not to a file that Snakemake should name."""
        return False

    @property
    def has_filter(self) -> bool:
        """Snakemake's own filter is used."""
        return False

    @property
    def has_formatter(self) -> bool:
        """Snakemake's own formatter is used, for the log."""
        return False

    @property
    def needs_rulegraph(self) -> bool:
        """The rule graph is not needed."""
        return False

    def emit(self, record: logging.LogRecord) -> None:
        """Take in one record."""
        values: dict[str, Any] = record.__dict__
        state, display, log = self.settings.state, self.settings.display, self.settings.log
        if state is not None:
            state.take(str(values.get("event", "")), values)
            if record.levelno >= logging.ERROR and "event" not in values:
                state.errors.append(record.getMessage())
        if display is not None:
            display.update()
        if log is not None and (text := self.format(record)) not in ("", "None"):
            log.write(f"{text}\n")
            log.flush()


def register() -> None:
    """Make the plugin known to Snakemake."""
    registry = LoggerPluginRegistry()
    if not registry.is_installed(NAME):
        registry.register_plugin(NAME, sys.modules[__name__])
