"""What leaves: tables, figures, a report and the record, each after the guard."""
