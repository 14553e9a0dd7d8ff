"""Results as text: plain sentences first, then tables.

Every piece that comes from outside (names, messages) goes through `safe` in here, once.
"""

from oakum.report.text.check import check_text
from oakum.report.text.description import description_text
from oakum.report.text.plan import plan_text, rehearsal_text
from oakum.report.text.protection import protect_text

__all__ = ["check_text", "description_text", "plan_text", "protect_text", "rehearsal_text"]
