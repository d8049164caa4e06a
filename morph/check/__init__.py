"""The check stage: measures the written insert and judges every figure by the worse of process and service limits."""

from __future__ import annotations

from morph.check.fields import ChannelFields
from morph.check.insert import check_insert, measure_fields
from morph.check.subject import CheckSubject

__all__ = ["ChannelFields", "CheckSubject", "check_insert", "measure_fields"]
