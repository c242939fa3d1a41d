"""What people read: tables, figures, the page, the summary and the statement. A pure function of stored results."""
