"""The way in: Prefect flows and the commands. No science here."""
