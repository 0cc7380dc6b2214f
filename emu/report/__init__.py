"""What a run of `emu infer` leaves behind: draws, tables, figures and their record."""
