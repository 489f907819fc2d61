"""When and through how much air: times, airmass, Sun and Moon."""
