"""driblet_analysis: reads run files; writes tables, figures and verdicts."""
