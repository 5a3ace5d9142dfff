"""The hooks. Each registers classes; the core makes objects of them and calls those.

A plugin module marks its functions with `hookimpl`; a function whose name is none of these is an error.
"""

from __future__ import annotations

import pluggy

from hindlight.plugin import ConsistencyCheck, Dialect, Estimator, PeriodSearch, Statistic

hookspec = pluggy.HookspecMarker("hindlight")
hookimpl = pluggy.HookimplMarker("hindlight")


@hookspec
def register_dialects() -> list[type[Dialect]]:  # type: ignore[empty-body]  # a specification has no body
    """Ways of reading headers."""


@hookspec
def register_estimators() -> list[type[Estimator]]:  # type: ignore[empty-body]  # a specification has no body
    """Ways of measuring a flux at a position."""


@hookspec
def register_statistics() -> list[type[Statistic]]:  # type: ignore[empty-body]  # a specification has no body
    """Numbers from light curves, calibrated by the controls."""


@hookspec
def register_period_searches() -> list[type[PeriodSearch]]:  # type: ignore[empty-body]  # a specification has no body
    """Searches for a period in the channels of one position."""


@hookspec
def register_consistency_checks() -> list[type[ConsistencyCheck]]:  # type: ignore[empty-body]  # as above
    """Questions that a real source must answer well."""
