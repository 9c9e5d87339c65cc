"""Schedules: airline files, public transport feeds and plain tables, made into stations and legs by date."""

from legworth.schedules.gtfs import GtfsOptions
from legworth.schedules.operating_days import Window
from legworth.schedules.places import Places, read_places
from legworth.schedules.reading import ScheduleOptions, read_schedule
from legworth.schedules.seats import read_seats
from legworth.schedules.ssim import SsimOptions
from legworth.schedules.timetable import Timetable

__all__ = [
    "GtfsOptions",
    "Places",
    "ScheduleOptions",
    "SsimOptions",
    "Timetable",
    "Window",
    "read_places",
    "read_schedule",
    "read_seats",
]
