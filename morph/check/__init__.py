"""The check stage: measures the written insert and judges every figure by the worse of process and service limits."""

from __future__ import annotations

from morph.check.fields import ChannelFields
from morph.check.insert import Measured, check_insert, measure_fields, measure_insert
from morph.check.subject import CheckSubject

__all__ = ["ChannelFields", "CheckSubject", "Measured", "check_insert", "measure_fields", "measure_insert"]
