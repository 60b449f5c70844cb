"""The one root error of this package."""


class SitesError(ValueError):
    """A site, clock or model was given something it cannot work with; the message says what to do."""
