"""The state of an open window, without Qt: session, history, actions, journal, settings."""
