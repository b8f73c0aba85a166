"""What can be asked: a sweep, a cutoff question, or a map."""

from app.cutoff_sheets import CutoffSheet
from app.map_sheets import MapSheet
from app.sheets import Sheet

Question = Sheet | CutoffSheet | MapSheet
