"""What happens: one module an event family, behind one small interface."""
