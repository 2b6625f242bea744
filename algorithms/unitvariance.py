"""Zoning variance from base units: how far a map depends on how units are grouped into zones."""

import numpy as np
from qgis.core import QgsProcessingParameterFeatureSink

from ..plugin import looks
from ..plugin.host import POLYGONS
from ..plugin.text import listed, number, tr
from .base import SteadfieldAlgorithm
from .unitvariance_outputs import table_of, unit_columns, write_extremes
from .unitvariance_page import write_page
from .unitvariance_study import KINDS, STATISTICS, examine
from .zoning_units import add_scheduler, add_units, add_zones


class UnitVariance(SteadfieldAlgorithm):
    """Group base units into zones at random, again and again, and say what stays the same."""

    ID = "unitvariance"
    NAME = tr("Zoning variance from base units")
    GROUP = "zoning"
    QUESTION = "cut"
    TAGS = (tr("boundary"), tr("scale"), tr("zoning"), tr("regions"), tr("wards"), tr("MAUP"))
    HELP = tr(
        "Groups base units into connected zones at random, many times at several numbers of zones, "
        "and keeps for every unit the value of the zone it fell in. The result says how much of "
        "the map is owed to the grain (number of zones), to the cut (where the lines run) and to "
        "small numbers, which units stand above or below the threshold under any cut, and where an "
        "official zoning stands among all those that could have been drawn. With a total the value "
        "is the count per 1000 of it; without, the count per square kilometre."
    )

    def define(self):
        add_units(
            self, tr("Small areas that zones are made of, with counts; they must share borders.")
        )
        self.add_field(
            "COUNT", tr("Count"), "UNITS", tr("Events or members in each unit."), optional=False
        )
        self.add_field(
            "TOTAL",
            tr("Total"),
            "UNITS",
            tr("What the count is taken over, such as residents. Empty: area."),
        )
        self.add_field(
            "LABEL", tr("Name of a unit"), "UNITS", tr("Used in the report."), numeric=False
        )
        add_zones(self, 500)
        self._add_official()
        self._add_judgement()
        self.add_seed()
        add_scheduler(self)
        self.add_working_crs()
        self._add_outputs()

    def _add_official(self):
        self.add_field(
            "OFFICIAL",
            tr("Official zoning: field"),
            "UNITS",
            tr("The official zone of each unit. Its statistics are placed among simulated ones."),
            numeric=False,
        )
        self.add_polygons(
            "OFFICIAL_ZONES",
            tr("Official zoning: polygons"),
            tr(
                "In place of the field: a unit goes to the zone with most of its area; units that "
                "lie across a line are reported."
            ),
            optional=True,
        )

    def _add_judgement(self):
        self.add_number(
            "THRESHOLD",
            tr("Threshold"),
            tr(
                "Value that units are judged against, per 1000 of the total, or per square "
                "kilometre without one. Empty: the overall value of the whole area."
            ),
            least=0.0,
            optional=True,
        )
        self.add_number(
            "BUDGET",
            tr("Budget (share of the total)"),
            tr(
                "Share of the total that a service can cover, 0 to 1. The report then says how "
                "many events are reached, or missed, because of where lines run."
            ),
            least=0.0,
            most=1.0,
            optional=True,
        )
        self.add_choice(
            "STATISTIC",
            tr("Statistic of the extreme zonings"),
            STATISTICS,
            tr("The zonings with its largest and its smallest value come out as polygons."),
            advanced=True,
        )
        self.add_choice(
            "KIND",
            tr("A count is of"),
            KINDS,
            tr("Decides what chance alone would do: binomial for members, Poisson for events."),
            advanced=True,
        )

    def _add_outputs(self):
        self.add(
            QgsProcessingParameterFeatureSink("UNITS_OUT", tr("Units with variance"), POLYGONS),
            tr(
                "Every unit with its own fields and: value, mean over all zonings, standard "
                "deviations by source, quantiles, p_above, verdict and range of ranks."
            ),
        )
        self.add_table(
            "TABLE",
            tr("Table of statistics"),
            tr("One row for each number of zones and statistic: quantiles, extremes, official."),
        )
        self.add(
            QgsProcessingParameterFeatureSink(
                "EXTREMES", tr("Extreme zonings"), POLYGONS, None, True, False
            ),
            tr("The zones of the two most extreme zonings; tick one or the other in the legend."),
        )
        self.add_report()
        self.add_numbers(
            THRESHOLD_USED=tr("Threshold used"),
            UNITS_ABOVE=tr("Units that hold above"),
            UNITS_BELOW=tr("Units that hold below"),
            UNITS_DEPEND=tr("Units that depend on the cut or on small numbers"),
            SHARE_ABOVE=tr("Share of the total in units that hold above"),
            SHARE_BELOW=tr("Share of the total in units that hold below"),
            EVENTS_REACHED=tr("Events reached by the average over zonings"),
            EVENTS_BETWEEN_ZONINGS=tr("Events between the 5 % and the 95 % zoning"),
        )

    def work(self, job):
        study = examine(job)
        give_numbers(job, study)
        job.write_layer(
            "UNITS_OUT", unit_columns(study), study.units.polygons, "polygon", looks.verdicts()
        )
        job.write_layer("TABLE", table_of(study), None, "none")
        write_extremes(job, study)
        write_page(self, job, study)


def give_numbers(job, study):
    """Number outputs, and the main ones in the log."""
    verdicts = study.verdicts()
    job.give("THRESHOLD_USED", study.threshold)
    for name, code in (("UNITS_ABOVE", 1), ("UNITS_BELOW", -1), ("UNITS_DEPEND", 0)):
        job.give(name, int((verdicts == code).sum()))
    job.give("SHARE_ABOVE", study.share_with(1))
    job.give("SHARE_BELOW", study.share_with(-1))
    above = [study.labels[unit] for unit in np.flatnonzero(verdicts == 1)]
    job.inform(
        tr("Threshold: {} {}. Units that hold above: {}.").format(
            number(study.threshold), study.rate.unit, listed(above) or tr("none")
        )
    )
    found = study.run.allocation
    if found is not None:
        low, _, high = found.quantiles()
        job.give("EVENTS_REACHED", float(found.averaged))
        job.give("EVENTS_BETWEEN_ZONINGS", float(high - low))
