"""An event-by-event detector that shares nothing with the forward model."""
