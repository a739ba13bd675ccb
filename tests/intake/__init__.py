"""Files made to do harm, and what reading them costs."""
