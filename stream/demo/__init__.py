"""An invented town, drivers with known truth, and their pings; knows nothing of detection."""
