"""From verdicts to what people and programs read: event documents, their sentences, the status."""
