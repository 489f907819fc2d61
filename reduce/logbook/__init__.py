"""The append-only memory of a campaign."""
