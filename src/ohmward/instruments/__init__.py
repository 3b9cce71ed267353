"""One small class per role, over a talker that speaks a driver's words."""
