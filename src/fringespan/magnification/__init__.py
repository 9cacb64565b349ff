"""Whether the microscope's magnification is right: check, uncertainty budget, verdict, log."""
