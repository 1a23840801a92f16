"""Tables, pictures and the report page: what a fitted bridge says, in forms that people read."""
