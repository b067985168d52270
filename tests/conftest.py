"""What every test shares: hypothesis without a stop-watch, for busy machines."""

from hypothesis import settings

settings.register_profile("unhurried", deadline=None)
settings.load_profile("unhurried")
