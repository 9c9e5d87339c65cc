"""Control service: requests answered while a customer waits, seats sold once, pages for planners."""
