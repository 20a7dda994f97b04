"""The trap file: read, checked, in SI; and what physics and guard are built from."""
