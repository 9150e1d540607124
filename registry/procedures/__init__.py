"""Does what a person, a vehicle or the schedule asks, once for every door: authority, transaction, journal."""
