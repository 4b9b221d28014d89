"""The report of a design: `page` renders it, `asked` and `found` word what it says."""
