"""SQL files: numbered migrations, named questions, and checks that must return no row."""
