"""Behind `latchscan.layout.rings`: how strips are found to enclose, and what they are worth."""
