"""Pure detection: pings, carry and streets in; passages, sections, trips and counts out."""
