"""Changes of load of a study: prepared on the nominal unit, then followed unit by unit."""
