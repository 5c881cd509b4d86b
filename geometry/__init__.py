"""Space: where heads, targets, coils and poses are. No clock, no limits, no device."""
