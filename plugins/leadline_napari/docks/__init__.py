"""Each dock: its view and its controller, wired to the workbench that holds them."""
