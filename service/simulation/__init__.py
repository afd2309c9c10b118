"""What a policy would do on invented streams: honest and fraudulent amounts, and how it fares."""
