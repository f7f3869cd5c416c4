"""What is handed out: the results folder, the map page, the tables of the terminal."""
