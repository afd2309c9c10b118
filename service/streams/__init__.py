"""One stream: its log record, folded state, fold and alarms; pure."""
