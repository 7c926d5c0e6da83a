"""What must hold: a module per family of rules, a function per rule."""
