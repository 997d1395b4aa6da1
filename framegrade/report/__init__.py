"""What a graded shoot is shown as: tables on disk (`tables`), the terminal (`terminal`), plots (`plots`)."""
