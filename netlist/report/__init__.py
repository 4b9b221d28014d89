"""The report of a design: `page` renders it; `asked`, `found`, `choice` and `boards` word it."""
