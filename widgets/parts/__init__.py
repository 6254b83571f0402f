"""The parts of the Desk: each turns a snapshot of the determination into what one view shows."""
