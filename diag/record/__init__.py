"""The findings log: events, the journal that keeps them, and what is read out of it."""
