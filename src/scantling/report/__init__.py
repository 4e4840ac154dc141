"""From records to text and JSON; nothing is computed here."""
