"""The form: asks and shows, knows nothing."""
