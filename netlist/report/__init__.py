"""The report of a design: `page` renders it, `asked`, `found` and `choice` word what it says."""
