"""The one use case: recording, plan and marks become a set."""
