"""Results turned into text and JSON: pure functions of one result record, no printing."""
