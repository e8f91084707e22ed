"""The usual words of the trade in the headings and codes of files, for drafting a column guide."""

from __future__ import annotations

import re

#: What utilities call our columns: words without spaces or signs, the surer ones first.
HEADING_WORDS: dict[str, tuple[str, ...]] = {
    "meter_id": (
        *("meter", "meterno", "meternumber", "meternum", "meternr", "meterserial", "metername"),
        *("meterserialnumber", "metersn", "deviceid", "device", "deviceno", "devicenumber"),
        *("servicepoint", "servicepointid", "spid", "premise", "premiseid", "premiseno"),
        *("endpoint", "endpointid", "endpointserialnumber", "usagepoint", "usagepointid"),
        *("channelid", "channel", "esiid", "nmi", "mpan", "serial", "serialno", "serialnumber"),
    ),
    "unit_id": (
        *("transformer", "transformerid", "transformerno", "transformernumber", "xfmr", "xfmrid"),
        *("xfmrno", "xformer", "xformerid", "trafo", "trafoid", "tfid", "unit", "unitno"),
        *("unitnumber", "bankid", "equipmentid", "equipment", "assetid", "asset", "assetno"),
    ),
    "site_id": (
        "site",
        "siteno",
        "location",
        "locationid",
        "locationno",
        "gridno",
        "pole",
        "poleno",
    ),
    "read_at": (
        *("readat", "readtime", "readdate", "readdatetime", "readingtime", "readingdate"),
        *("readingdatetime", "timestamp", "datetime", "dateandtime", "datetimestamp", "time"),
        *("intervaltime", "intervalstart", "intervalstarttime", "intervalstartdatetime"),
        *("starttime", "startdatetime", "startdate", "intervalend", "intervalendtime"),
        *("intervalenddatetime", "endtime", "enddatetime", "stamp", "localtime", "utc", "utctime"),
        *("period", "periodstart", "periodend", "obstime", "observationtime", "valid", "validtime"),
    ),
    "date": ("date", "day", "readdate", "readingdate", "usagedate", "intervaldate", "flowdate"),
    "quality": (
        *("quality", "qualitycode", "qualityflag", "readquality", "readingquality", "validation"),
        *("validationcode", "validationstatus", "status", "statuscode", "readstatus", "flag"),
        *("flags", "estimationcode", "readtype", "readingtype", "qc", "editcode", "edits"),
    ),
    "kwh": (
        *("kwh", "usage", "consumption", "energy", "activeenergy", "kwhdelivered", "delivered"),
        *("usagekwh", "kwhusage", "netkwh", "kwhnet", "reading", "value", "intervalusage"),
        *(
            "intervalvalue",
            "intervalreading",
            "readingvalue",
            "readvalue",
            "usagevalue",
            "wh",
            "mwh",
        ),
    ),
    "kvarh": ("kvarh", "reactiveenergy", "kvarhdelivered", "netkvarh", "kvarhusage", "varh"),
    "kw": ("kw", "demand", "activepower", "power", "load", "realpower", "kwdemand", "loadkw"),
    "kva": ("kva", "apparentpower", "kvademand", "loadkva"),
    "kvar": ("kvar", "reactivepower", "kvardemand"),
    "amps_lv": (
        *("ampslv", "amps", "amperes", "amp", "current", "secondaryamps", "secondarycurrent"),
        "lvamps",
    ),
    "amps_hv": ("ampshv", "primaryamps", "primarycurrent", "hvamps", "lineamps", "linecurrent"),
    "rated_kva": (
        *("ratedkva", "kvarating", "ratingkva", "kva", "rating", "capacity", "capacitykva", "size"),
        *("nameplatekva", "nameplaterating", "kvasize", "ratedpower", "ratedcapacity", "mva"),
    ),
    "feeder": ("feeder", "feederid", "feederno", "feedername", "circuit", "circuitid", "circuitno"),
    "installed_on": (
        "installedon",
        "installdate",
        "installationdate",
        "dateinstalled",
        "inservice",
    ),
    "removed_on": ("removedon", "removaldate", "dateremoved", "retired", "retireddate"),
    "phases": ("phases", "phase", "nophases", "numberofphases", "phasecount"),
    "hv_volts": (
        *("hvvolts", "primaryvoltage", "primaryvolts", "primvolt", "highvoltage", "hv", "hvkv"),
        "primarykv",
    ),
    "lv_volts": (
        *("lvvolts", "secondaryvoltage", "secondaryvolts", "secvolt", "lowvoltage", "lv", "lvkv"),
    ),
    "impedance_pct": ("impedancepct", "impedance", "percentimpedance", "pctimpedance", "pctz", "z"),
    "winding_rise_c": ("windingrisec", "windingrise", "temprise", "temperaturerise", "ratedrise"),
    "cooling": ("cooling", "coolingclass", "coolingtype"),
    "mounting": ("mounting", "mount", "mounttype", "installationtype", "style"),
    "year_made": ("yearmade", "year", "manufactureyear", "yearofmanufacture", "mfgyear", "built"),
    "no_load_loss_w": ("noloadlossw", "noloadloss", "noloadlosses", "coreloss", "ironloss", "nll"),
    "load_loss_w": ("loadlossw", "loadloss", "loadlosses", "copperloss", "windingloss", "ll"),
    "latitude": ("latitude", "lat", "y", "gpslat"),
    "longitude": ("longitude", "lon", "long", "lng", "x", "gpslon", "gpslong"),
    "customers": ("customers", "customercount", "numberofcustomers", "nocustomers", "services"),
    "critical_customers": ("criticalcustomers", "critical", "criticalcount", "criticalload"),
    "weather_station": ("weatherstation", "weatherstationid", "station", "stationid"),
    "starts_on": ("startson", "startdate", "effectivedate", "effectivefrom", "from", "connectedon"),
    "ends_on": ("endson", "enddate", "effectiveto", "to", "until", "disconnectedon"),
    "multiplier": ("multiplier", "metermultiplier", "mult", "ctratio", "billingmultiplier"),
    "power_factor": ("powerfactor", "pf", "cosphi"),
    "class": ("class", "customerclass", "rateclass", "rate", "ratecode", "revenueclass", "tariff"),
    "station_id": ("stationid", "station", "stationname", "weatherstation", "wban", "icao"),
    "air_temp_c": (
        *("airtempc", "airtemp", "airtemperature", "temp", "tempc", "temperature", "drybulb"),
        *("drybulbtemperature", "ambient", "ambienttemp", "ambienttemperature", "outdoortemp"),
    ),
    "air_temp_f": ("airtempf", "tempf", "temperaturef", "drybulbf"),
    "month": ("month", "billingmonth", "billmonth", "yearmonth"),
    "hours": ("hours", "schedule", "burninghours", "operation"),
}

#: Words that say that a value flows from the customer to the network.
RECEIVED = re.compile(r"received|export|reverse|generat|injected|fedin|feedin", re.IGNORECASE)

#: Words that say that a stamp marks the end of its interval.
AT_END = re.compile(r"\bend(ing|time|datetime)?\b|interval ?end|period ?end|\bhe\b", re.IGNORECASE)

#: What utilities call our quality words.
QUALITY_WORDS: dict[str, tuple[str, ...]] = {
    "measured": (
        *("a", "act", "actual", "m", "meas", "measured", "v", "val", "valid", "ok", "good", "g"),
        *("r", "raw", "read", "real", "normal", "verified", "validated", "final"),
    ),
    "estimated": (
        *("e", "est", "estimated", "estimate", "sub", "subst", "substituted", "interpolated", "i"),
        *("edited", "calculated", "calc", "adjusted", "projected"),
    ),
    "doubtful": ("d", "q", "doubtful", "suspect", "questionable", "s", "bad", "failed", "f"),
    "missing": ("n", "missing", "miss", "x", "none", "null", "nodata", "noread", "na", "gap"),
}


def bare(heading: str) -> str:
    """Return a heading as the tables above write it: letters and digits alone.

    >>> bare("Read-Date / Time")
    'readdatetime'
    """
    return "".join(re.findall(r"[^\W_]+", heading.casefold()))


_UNIT = re.compile(
    r"[\(\[\s_/-]\s*((?:[kKmM])?(?:Wh|wh|WH|varh|VArh|VARh|VARH|VAr|var|VAR|VA|va|W|w|A|V|v)|°?\s?[CFK]|deg\s?[CF])"
    r"\s*[\)\]]?\s*$"
)


def heading_and_unit(heading: str) -> tuple[str, str | None]:
    """Return a heading without the unit at its end, and that unit.

    >>> heading_and_unit("Usage (Wh)"), heading_and_unit("Air temp [°F]")
    (('Usage', 'Wh'), ('Air temp', '°F'))
    >>> heading_and_unit("Meter No")
    ('Meter No', None)
    """
    found = _UNIT.search(heading)
    if found is None:
        return heading.strip(), None
    return heading[: found.start()].strip(), found[1].replace(" ", "").replace("deg", "°")
