"""From announcements and prices to abnormal returns on the exchange's own sessions."""
