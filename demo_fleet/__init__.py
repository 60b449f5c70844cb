"""An invented fleet, its weather and meters, and a finer model that plays the truth behind an event."""
