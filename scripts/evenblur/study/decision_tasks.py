"""Settings of the steps that prepare and check decisions: the price of the target, the effect of the sites."""

import hashlib
import json
from typing import Any

from evenblur.study.tasks import Settings, Tasks


def price_settings(tasks: Tasks, plan_file: str) -> Settings:
    """Settings of the prices: the study's content, the plan's, and the page's layout decide."""
    return {
        "code": tasks.code("price_targets.py"),
        "layout": tasks.page_digest("plan.html.j2", "style.css"),
        "plan": _digest(tasks.plan(plan_file)),
        "study": tasks.study_digest(),
    }


def _digest(value: Any) -> str:
    return hashlib.sha256(json.dumps(value, sort_keys=True).encode()).hexdigest()
