"""What everything above speaks in: batches, species tokens, refusals, columns."""
