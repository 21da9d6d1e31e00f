"""Figures that stand in the database, read when somebody asks for the metrics."""

import logging
from collections.abc import Iterator

from prometheus_client.core import GaugeMetricFamily, InfoMetricFamily, Metric
from prometheus_client.registry import Collector

from labplan import datafiles
from labplan.base import outbox
from labplan.base.models import OutboxMessageState
from labplan.base.rights import OPERATOR
from labplan.procedures import life
from labplan.procedures.selectors import count_by_state

logger = logging.getLogger(__name__)
NOT_DONE = (OutboxMessageState.NEW, OutboxMessageState.SENT, OutboxMessageState.DEAD)


class DatabaseGauges(Collector):
    """A database that is away leaves out its own figures and spoils no others."""

    def collect(self) -> Iterator[Metric]:
        yield _data_info()
        try:
            read = [*_outbox_gauges(), _procedures()]
        except Exception as error:
            logger.warning("metrics: no figures from the database: %s", type(error).__name__)
            read = []
        yield _single("database_up", "1 when the database gave its figures.", bool(read))
        yield from read


def _single(name: str, text: str, value: float) -> GaugeMetricFamily:
    return GaugeMetricFamily(f"labplan_{name}", text, value=float(value))


def _data_info() -> InfoMetricFamily:
    version = {"data_version": datafiles.data_version()}
    return InfoMetricFamily("labplan_data", "The version of the packaged tables.", value=version)


def _outbox_gauges() -> Iterator[GaugeMetricFamily]:
    figures = outbox.outbox_figures()
    messages = GaugeMetricFamily(
        "labplan_outbox_messages", "Messages that are not done.", labels=["queue", "state"]
    )
    for queue in outbox.QUEUES:
        for state in NOT_DONE:
            messages.add_metric([queue, state.value], figures.waiting.get((queue, state.value), 0))
    yield messages
    yield _single(
        "outbox_oldest_unfinished_age_seconds",
        "Age of the oldest message that is neither done nor dead; 0 without one.",
        figures.oldest_age_s,
    )
    yield _single(
        "outbox_dead_letters", "Messages that were given up.", figures.count(NOT_DONE[2].value)
    )
    yield _single("outbox_paused", "1 while nothing is sent.", figures.is_paused)


def _procedures() -> GaugeMetricFamily:
    counted = count_by_state(actor=OPERATOR)
    made = GaugeMetricFamily("labplan_procedures", "Procedures there are.", labels=["state"])
    for state in life.STATES:
        made.add_metric([state], counted.get(state, 0))
    return made
