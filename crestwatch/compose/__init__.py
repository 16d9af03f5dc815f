"""The only joiner of rooms: picks concrete parts and hands them to each other."""
