"""What is wrong or doubtful in a stage: one table of slugs, and the guards that come before verdicts."""
