"""The settings of one study: read from study.toml, checked whole, every default filled in.

Hands on a frozen `Study`. All problems of a file are reported together in one `SettingsError`,
one line each. Paths in a study are relative to the folder of its file.
"""

from .sections import (
    EventSettings,
    GroupSettings,
    HoldoutSettings,
    MiningSettings,
    PriceSettings,
    ReviewSettings,
    SessionSettings,
    TableSettings,
    TestingSettings,
    WindowSettings,
)
from .study import Study, load_study, study_from_dict
from .values import is_url, mask_credentials, redact_url

__all__ = [
    "EventSettings",
    "GroupSettings",
    "HoldoutSettings",
    "MiningSettings",
    "PriceSettings",
    "ReviewSettings",
    "SessionSettings",
    "Study",
    "TableSettings",
    "TestingSettings",
    "WindowSettings",
    "is_url",
    "load_study",
    "mask_credentials",
    "redact_url",
    "study_from_dict",
]
