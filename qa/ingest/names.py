"""Which of a log's columns is which: the trade's words, and units as headers give them.

Nothing is guessed silently. A name that fits two meanings, or two columns that fit one meaning, is left
alone and named, together with what to write in the survey file.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

from qa.model.columns import COLUMNS
from qa.model.errors import InputError, UnitError
from qa.model.survey_file import ColumnChoices
from qa.model.units import METRE, ONE, SECOND, Conversion, Unit, conversion

TIME_PARTS = (
    "date",
    "time_of_day",
    "year",
    "month",
    "day",
    "day_of_year",
    "hour",
    "minute",
    "second",
    "seconds_of_day",
)
"""Columns that give the time together, where it does not stand in one."""

_WORDS: dict[str, str] = {
    "time": "time timestamp datetime dateandtime datetimeutc utcdatetime utctime timeutc utc pingtime epoch epochtime "
    "unixtime unixepoch unix posixtime logtime transmittime transmissiontime timeoftransmission timeofping isotime "
    "timestamputc utctimestamp stamp timetag recordtime acquisitiontime localtime datetimelocal localdatetime "
    "pingtimestamp unixtimestamp epochutc utcepoch gmt timegmt pingdatetime eventtime",
    "date": "date utcdate dateutc pingdate surveydate localdate calendardate",
    "time_of_day": "timeofday clock clocktime hhmmss",
    "year": "year yyyy",
    "month": "month",
    "day": "day dayofmonth",
    "day_of_year": "dayofyear doy julianday jday yearday jd ordinalday",
    "hour": "hour hours hh",
    "minute": "minute minutes min",
    "second": "second seconds sec secs",
    "seconds_of_day": "secondsofday secondofday sod secofday secondsaftermidnight secondssincemidnight utcseconds",
    "line": "line lineno linename lineid lineident linenumber linenum surveyline surveylinename trackline "
    "tracklinename runline linelabel lineidentifier runlinename",
    "channel": "channel chan ch channelno channelnumber channelname channelid side head headno headnumber headid "
    "transducer transducerid transducerno transducernumber sonarhead sonarheadno portstarboard portstbd portorstarboard "
    "sonarchannel sidename",
    "ping": "ping pingno pingnr pingnum pingnumber pingid pingcounter pingcount pingindex pingidx pingsequence pingseq "
    "shot shotno shotnumber pingsequencenumber pingidentifier nping swathno swathnumber swathid swathnr transmissionno "
    "transmissionnumber sweepno sweepnumber",
    "frequency": "frequency freq centrefrequency centerfrequency centrefreq centerfreq operatingfrequency operatingfreq "
    "sonarfrequency sonarfreq carrierfrequency carrierfreq transmitfrequency txfrequency txfreq acousticfrequency "
    "pulsefrequency signalfrequency workingfrequency frequencycentre frequencycenter",
    "bandwidth": "bandwidth sweepbandwidth signalbandwidth chirpbandwidth sweptbandwidth pulsebandwidth txbandwidth "
    "transmitbandwidth fmbandwidth sweepwidth",
    "pulse_length": "pulselength pulselen pulseduration pulsedur pulsewidth pulse txpulselength transmitpulselength "
    "signallength transmitlength txpulsewidth transmitpulsewidth txpulseduration transmitpulseduration pulsetime "
    "lengthofpulse pinglength pingduration tau txpulse transmitpulse",
    "pulse_form": "pulseform pulsetype waveform pulsemode modulation signaltype pulsemodulation signalform pulseshape "
    "cwfm cworfm transmitform txwaveform",
    "source_level": "sourcelevel sl transmitsourcelevel txsourcelevel transmitlevel txlevel sourcelev",
    "gain": "gain receivergain rxgain receivegain fixedgain recgain receivergainsetting gainsetting",
    "range_scale": "rangescale rangesetting rangesel maxrange maximumrange rangemax rangelimit recordingrange "
    "sonarrange sonarrangescale selectedrange rangeperside recordrange slantrangescale slantrangesetting",
    "ping_rate": "pingrate prf pulserepetitionfrequency repetitionrate pingfrequency pingspersecond pulserate "
    "pingrepetitionrate pulserepetitionrate reprate pingreprate pingratesetting",
    "beamwidth_along": "beamwidthalong alongtrackbeamwidth beamwidthalongtrack alongbeamwidth transmitbeamwidth "
    "txbeamwidth txbeam foreaftbeamwidth alongshipbeamwidth beamwidthtx beamwidthtransmit horizontalbeamwidth "
    "beamwidthforeaft alongshipsbeamwidth longitudinalbeamwidth beamwidthlongitudinal alongbw txbw alongtrackbeamangle "
    "beamwidthhorizontal",
    "beamwidth_across": "beamwidthacross acrosstrackbeamwidth beamwidthacrosstrack acrossbeamwidth receivebeamwidth "
    "rxbeamwidth rxbeam athwartbeamwidth athwartshipbeamwidth athwartshipsbeamwidth beamwidthrx beamwidthreceive "
    "transversebeamwidth beamwidthtransverse acrossbw rxbw beamwidthathwart crosstrackbeamwidth",
    "sound_speed": "soundspeed speedofsound soundvelocity velocityofsound sv surfacesoundspeed surfacesoundvelocity "
    "soundspeedattransducer soundspeedtransducer transducersoundspeed transducersoundvelocity svs sos surfacesv "
    "svattransducer soundspeedsurface soundvel sndspeed svsurface svtransducer svtd sndvel watersoundspeed "
    "watersoundvelocity soundspeedathead",
    "temperature": "temperature temp watertemp watertemperature sst seatemperature tempwater temperaturewater wtemp "
    "seawatertemperature surfacetemperature transducertemperature",
    "salinity": "salinity sal psal practicalsalinity watersalinity",
    "transducer_depth": "transducerdepth transducerdraft transducerdraught draft draught fishdepth towfishdepth "
    "sonardepth towdepth immersion transducerimmersion sonardraft sonardraught depthoftransducer towedbodydepth "
    "depthoffish depthoftowfish headdepth",
    "altitude": "altitude alt fishaltitude towfishaltitude heightoverseabed heightaboveseabed heightabovebottom "
    "sensoraltitude altitudeaboveseabed fishheight towfishheight sonaraltitude transduceraltitude heightoffseabed "
    "altitudeoverseabed towedbodyaltitude heightovertheseabed bottomaltitude",
    "latitude": "latitude lat latdeg latdd latitudedd gpslat gpslatitude shiplat shiplatitude vessellatitude vessellat "
    "latitudewgs84 latwgs84 wgs84lat wgs84latitude fishlat fishlatitude latitudedeg sonarlat sonarlatitude latdecimal "
    "decimallatitude poslat ddlat latitudedecimal",
    "longitude": "longitude lon long lng londeg londd longitudedd gpslon gpslong gpslongitude shiplon shiplong "
    "shiplongitude vessellongitude vessellon longitudewgs84 lonwgs84 longwgs84 wgs84lon wgs84longitude fishlon "
    "fishlongitude longitudedeg sonarlon sonarlongitude londecimal decimallongitude poslon ddlon longitudedecimal",
    "easting": "easting east eastings utmeasting utme utmx gridx xcoord xcoordinate projectedx gride grideasting "
    "eastingutm xutm eastcoordinate",
    "northing": "northing north northings utmnorthing utmn utmy gridy ycoord ycoordinate projectedy gridn gridnorthing "
    "northingutm yutm northcoordinate",
    "speed": "speed sog speedoverground groundspeed vesselspeed shipspeed gpsspeed boatspeed spd speedovergrnd towspeed "
    "speedmadegood smg shipsog vesselsog speedsog sogspeed surveyspeed speedovertheground",
    "course": "course cog courseoverground coursemadegood cmg truecourse shipcourse vesselcourse courseovergrnd "
    "gpscourse coursetrue cogtrue courseovertheground",
    "heading": "heading hdg hdt trueheading headingtrue gyro gyroheading shipheading vesselheading yaw shiphdg "
    "vesselhdg head_ing fishheading headingdeg truehdg",
    "roll": "roll rollangle vesselroll shiproll",
    "pitch": "pitch pitchangle vesselpitch shippitch",
    "heave": "heave vesselheave shipheave heaveup",
    "tide": "tide tideheight waterlevel tidalheight tidelevel heightoftide waterlevelheight",
    "beam": "beam beamno beamnr beamnum beamnumber beamid beamindex beamidx beamidentifier soundingno nbeam "
    "beamsequence",
    "beam_angle": "beamangle angle takeoffangle launchangle pointingangle beampointingangle beamsteeringangle "
    "acrosstrackangle acrossangle steeringangle rxangle receiveangle athwartshipsangle athwartangle athwartshipangle "
    "theta anglefromvertical anglefromnadir nadirangle anglefromthevertical rxbeamangle incidenceangle beamdepression "
    "depressionangle depression angleacross acrosstrackbeamangle beamlaunchangle",
    "depth": "depth waterdepth bottomdepth seabeddepth dpt z soundingdepth sounding correcteddepth depthcorrected "
    "depthbelowtransducer depthbelowsurface depthbelowwaterline dbt dbs rawdepth depthraw beamdepth depthofwater "
    "totaldepth seafloordepth reduceddepth depthbelowdatum depthwaterline bathy bathymetry depthsounding depthz",
    "slant_range": "slantrange beamrange slantdistance rangeslant bottomrange beamslantrange rangealongbeam "
    "acousticrange detectionrange",
    "two_way_time": "twowaytime twowaytraveltime twtt twt traveltime roundtriptime twowaytt traveltimetwoway "
    "twoway beamtraveltime tt2way traveltwoway",
    "accepted": "accepted accept valid good isvalid isgood beamaccepted validflag soundingaccepted qcaccept "
    "acceptedflag isaccepted accepted01 beamvalid soundingvalid okflag used",
    "north_or_south": "ns northsouth northorsouth lathemisphere latitudehemisphere latns hemispherens latdir latitudedir",
    "east_or_west": "ew eastwest eastorwest lonhemisphere longhemisphere longitudehemisphere lonew hemisphereew londir "
    "longitudedir",
    "rejected": "rejected reject isrejected beamrejected rejectedflag soundingrejected deleted isdeleted invalid "
    "isinvalid bad isbad",
}

_DOUBTFUL = {
    "range": "range_scale (the setting of the display) or slant_range (along each beam)",
    "bw": "bandwidth, beamwidth_along or beamwidth_across",
    "beamwidth": "beamwidth_along or beamwidth_across",
    "beamwidths": "beamwidth_along or beamwidth_across",
    "flag": "accepted, if 1 stands for an accepted sounding",
    "flags": "accepted, if 1 stands for an accepted sounding",
    "quality": "accepted, if 1 stands for an accepted sounding",
    "qualityflag": "accepted, if 1 stands for an accepted sounding",
    "qc": "accepted, if 1 stands for an accepted sounding",
    "status": "accepted, if 1 stands for an accepted sounding",
    "detection": "accepted, if 1 stands for an accepted sounding",
    "speedthroughwater": "speed, although it is through the water and not over the ground",
    "stw": "speed, although it is through the water and not over the ground",
    "power": "source_level, if it is in dB re 1 µPa at 1 m",
    "transmitpower": "source_level, if it is in dB re 1 µPa at 1 m",
    "txpower": "source_level, if it is in dB re 1 µPa at 1 m",
    "elevation": "depth, if it is positive down",
    "track": "line or course",
    "fix": "ping, if it counts pings",
    "onewaytime": "two_way_time, once it is doubled",
    "onewaytraveltime": "two_way_time, once it is doubled",
    "gpstime": "time, if it is UTC and not the satellites' own count",
    "x": "easting or longitude",
    "y": "northing or latitude",
    "height": "altitude, if it is over the seabed",
}
"""Words that have more than one meaning in the trade: never taken, always named."""

ROLES: dict[str, str] = {word: role for role, words in _WORDS.items() for word in words.split()}
for _name in COLUMNS:
    ROLES[_name.replace("_", "")] = _name

_QUALIFIERS = {
    *[
        "utc",
        "gmt",
        "z",
        "true",
        "magnetic",
        "mag",
        "t",
        "wgs84",
        "wgs",
        "nad83",
        "etrs89",
        "grs80",
        "gps",
        "local",
        "down",
        "up",
        "smoothed",
        "raw",
        "filtered",
        "corrected",
        "uncorrected",
        "logged",
        "set",
        "port",
        "starboard",
        "stbd",
        "p",
        "s",
        "n",
        "e",
        "north",
        "east",
        "waterline",
        "no",
        "nr",
        "number",
        "id",
        "count",
        "index",
        "iso",
        "iso8601",
        "text",
        "sec1970",
        "0",
        "1",
        "yn",
        "cw",
        "fm",
        "bool",
        "int",
        "float",
        "pos",
        "positive",
        "negative",
        "slant",
        "perside",
        "oneside",
        "below",
        "transducer",
        "datum",
    ],
    "+ve",
    "+",
    "+down",
    "#",
    "n.",
    "dd",
    "decimal",
    "",
}
_UNIT_WORDS = {
    "f": "degF",
    "deg c": "degC",
    "deg f": "degF",
    "degree c": "degC",
    "degrees c": "degC",
    "°c": "degC",
    "° c": "degC",
    "ºc": "degC",
    "°f": "degF",
    "°": "deg",
    "º": "deg",
    "decimal degrees": "deg",
    "decimal deg": "deg",
    "dec deg": "deg",
    "decdeg": "deg",
    "decimaldegrees": "deg",
    "dd": "deg",
    "deg.": "deg",
    "fth": "fathom",
    "fath": "fathom",
    "fathoms": "fathom",
    "usft": "ftUS",
    "us ft": "ftUS",
    "ftus": "ftUS",
    "mtr": "m",
    "mtrs": "m",
    "metre": "m",
    "metres": "m",
    "meters": "m",
    "meter": "m",
    "m_s": "m/s",
    "m_per_s": "m/s",
    "mpers": "m/s",
    "km_h": "km/h",
    "kmh": "km/h",
    "ft_s": "ft/s",
    "cm_s": "cm/s",
    "m/sec": "m/s",
    "gr": "grad",
    "grads": "grad",
    "gons": "gon",
    "msecs": "ms",
    "usecs": "us",
    "μs": "us",
    "µsec": "us",
    "micros": "us",
    "millis": "ms",
    "micro s": "us",
    "pss": "1",
    "pss-78": "1",
    "ppt": "1",
    "‰": "1",
    "pings/s": "Hz",
    "1/s": "Hz",
    "p/s": "Hz",
    "pps": "Hz",
    "db re 1µpa": "dB",
    "db//1upa": "dB",
    "db re 1 µpa at 1 m": "dB",
    "celsius": "degC",
}


@dataclass(frozen=True, slots=True)
class Binding:
    """One of a log's columns, recognised.

    ``unit`` is the unit as found, "" where none was given; ``how`` says where it was found.
    ``number`` is a wide column's own number (``depth_017``: 17), else -1. ``negated`` marks a column that
    says rejected where the canonical one says accepted.
    """

    role: str
    source: str
    index: int
    unit: str = ""
    how: str = "no unit given"
    convert: Conversion = field(default_factory=lambda: Conversion(ONE))
    number: int = -1
    negated: bool = False


@dataclass(frozen=True, slots=True)
class Header:
    """One column as the file gives it: its name, and the units beside it where there are any."""

    name: str
    units_row: str = ""
    metadata: str = ""


@dataclass(frozen=True, slots=True)
class Recognition:
    """What was made of a header. ``left_over`` are names not recognised, with advice where there is any."""

    bindings: tuple[Binding, ...]
    left_over: Mapping[str, str]
    ignored: tuple[str, ...]
    notes: tuple[str, ...]
    problems: tuple[str, ...] = ()

    def role(self, name: str) -> Binding | None:
        """The first binding of a role."""
        return next((b for b in self.bindings if b.role == name), None)


def plain(name: str) -> str:
    """A name without case, spaces and punctuation."""
    return re.sub(r"[\W_]+", "", name.lower())


def _marked_tokens(name: str) -> list[str]:
    return [t for t in re.split(r"[\s_.\-:,;|]+", name) if t]


def _tokens(name: str) -> list[str]:
    return _marked_tokens(re.sub(r"(?<=[a-z])(?=[A-Z])", " ", name))


def unit_of(text: str, unit: Unit | None) -> Conversion | None:
    """What a unit's text means, if it is one of the wanted kind; lenient on the trade's spellings."""
    text = text.strip().strip("[](){}").strip()
    if not text:
        return None
    lowered = " ".join(text.lower().split())
    for candidate in (text, _UNIT_WORDS.get(lowered)):
        if candidate is None:
            continue
        if unit is not None and str(unit) == "degC" and lowered == "f":
            candidate = "degF"
        try:
            found = conversion(candidate)
        except UnitError:
            continue
        if unit is None or found.unit == unit:
            return found
    return None


LONGEST_NAME = 300
"""A longer header is the wreck of something else, and is not looked into."""

_BRACKETS = re.compile(r"[(\[{<]([^()\[\]{}<>]*)[)\]}>]")
_NUMBERED = re.compile(r"^(.*?)[\s_.\-\[(#]*?(\d{1,4})[\])]?$")


def _readings(name: str) -> list[tuple[str, str, bool]]:
    """Ways to read a header as (base name, unit text, unit is certain), likeliest first."""
    found: list[tuple[str, str, bool]] = []
    inside = [m.strip() for m in _BRACKETS.findall(name)]
    outside = _BRACKETS.sub(" ", name).strip()
    if inside:
        found.append((outside, inside[-1], True))
        if len(inside) > 1:
            found.append((outside, inside[0], True))
        return found
    found.append((name, "", False))
    for separator in (",", "/", " in ", "@"):
        head, middle, tail = name.rpartition(separator)
        if middle and head:
            found.append((head, tail.strip(), False))
    # "freq_kHz" as written first: only then is a capital inside a word the start of another
    for tokens in dict.fromkeys((tuple(_marked_tokens(name)), tuple(_tokens(name)))):
        for count in (1, 2, 3):
            if len(tokens) > count:
                tail = "_".join(tokens[-count:])
                found.append((" ".join(tokens[:-count]), tail, False))
    return found


def _time_unit(text: str) -> bool:
    lowered = text.lower()
    return "since" in lowered or unit_of(text, SECOND) is not None


def _match(name: str) -> tuple[str, str, str] | None:
    """Role, unit text and a complaint, of a header's name; None where it is not known."""
    if len(name) > LONGEST_NAME:
        return None
    for base, unit_text, certain in _readings(name):
        key = plain(base)
        role = ROLES.get(key)
        if role is None:
            # "Time UTC", "Heading true": qualifiers at the end say nothing that changes the column
            tokens = _tokens(base)
            while len(tokens) > 1 and tokens[-1].lower() in _QUALIFIERS:
                tokens.pop()
                role = ROLES.get(plain(" ".join(tokens)))
                if role is not None:
                    break
        if role is None:
            continue
        if not unit_text:
            return role, "", ""
        column = COLUMNS.get(role)
        if role == "time" or role in TIME_PARTS:
            if certain or _time_unit(unit_text) or unit_text.lower() in _QUALIFIERS:
                return role, unit_text, ""
            continue
        kind = column.unit if column is not None else ONE
        if column is not None and column.kind != "number":
            return (role, "", "") if certain or unit_text.lower() in _QUALIFIERS else None
        if unit_of(unit_text, kind) is not None:
            return role, unit_text, ""
        words = [w for w in re.split(r"[\s,;/]+", unit_text.lower()) if w]
        # "Depth (s)" is in seconds, not of the starboard side: a unit of another kind is no qualifier.
        other = certain and kind != ONE and unit_of(unit_text, None) is not None
        if not other and all(w in _QUALIFIERS for w in words):
            return role, "", ""
        for word in re.split(r"[\s,;]+", unit_text):
            if word and unit_of(word, kind) is not None:
                return role, word, ""
        if certain:
            return role, unit_text, f'its unit "{unit_text}" is not known as a unit of {kind}'
    return None


def recognise(
    headers: Sequence[Header],
    choices: ColumnChoices,
    where: str,
    nested: Mapping[str, str] | None = None,
) -> Recognition:
    """Find the canonical columns among a log's own.

    Parameters
    ----------
    headers : sequence of Header
        The columns, in file order.
    choices : ColumnChoices
        What the survey file says of columns.
    where : str
        The file, for messages.
    nested : mapping of str to str, optional
        For a column inside a record, the name of its innermost part.

    Returns
    -------
    Recognition
        Bindings in file order. ``problems`` are notes on columns that were not taken.
    """
    nested = nested or {}
    by_name: dict[str, int] = {}
    for index, header in enumerate(headers):
        by_name.setdefault(header.name, index)
    plain_names: dict[str, list[int]] = {}
    for index, header in enumerate(headers):
        plain_names.setdefault(plain(header.name), []).append(index)

    def index_of(name: str) -> int | None:
        if name in by_name:
            return by_name[name]
        close = plain_names.get(plain(name), [])
        return close[0] if len(close) == 1 else None

    ignored = {i for name in choices.ignore if (i := index_of(name)) is not None}
    stated: dict[int, str] = {}
    for role, name in choices.names.items():
        place = index_of(name)
        if place is not None:
            stated[place] = role
    claimed = set(stated.values())
    candidates: dict[str, list[Binding]] = {}
    left: dict[str, str] = {}
    notes: list[str] = []
    problems: list[str] = []
    for index, header in enumerate(headers):
        if index in ignored or not header.name.strip():
            continue
        name = nested.get(header.name, header.name)
        if index in stated:
            role, unit_text, complaint = stated[index], "", ""
            for _base, text, _certain in _readings(name):
                wanted = COLUMNS[role].unit
                if text and (
                    unit_of(text, wanted) is not None or (role == "time" and _time_unit(text))
                ):
                    unit_text = text
                    break
            matched: tuple[str, str, str] | None = (role, unit_text, complaint)
        else:
            matched = _match(name)
        if matched is None:
            left[header.name] = _advice(name)
            continue
        role, unit_text, complaint = matched
        if role in claimed and index not in stated:
            left[header.name] = ""
            continue
        if complaint and role not in choices.units:
            text = (
                f'Column "{header.name}" looks like {role}, but {complaint}: it was not used. Write '
                f'{role} = "…" under [columns.units] in the survey file.'
            )
            problems.append(text)
            left[header.name] = text
            continue
        binding = Binding(role, header.name, index, unit_text, "header" if unit_text else "")
        binding = _with_unit(binding, header, choices, where)
        if index in stated:
            binding = replace(binding, how=binding.how or "survey file")
        candidates.setdefault(binding.role, []).append(binding)
    if "rejected" in candidates:
        if "accepted" in candidates:
            for binding in candidates.pop("rejected"):
                left[binding.source] = "the column of accepted soundings is used"
        else:
            candidates["accepted"] = [
                replace(b, role="accepted", negated=True) for b in candidates.pop("rejected")
            ]
    chosen: list[Binding] = []
    for role, found in candidates.items():
        if len(found) > 1:
            exact = [b for b in found if plain(nested.get(b.source, b.source)) == plain(role)]
            bare = [
                b
                for b in found
                if plain(_readings(nested.get(b.source, b.source))[0][0]) == plain(role)
            ]
            same = [b for b in found if b.source == found[0].source]
            if len(exact) == 1:
                kept = exact
            elif len(bare) == 1:
                kept = bare
            elif len(same) == len(found):
                kept = found[:1]
                notes.append(
                    f'Column "{found[0].source}" stands {len(found)} times; the first was used.'
                )
            else:
                kept = []
            if not kept:
                names = " and ".join(f'"{b.source}"' for b in found)
                text = (
                    f"Columns {names} both fit {role}: none was used. Write, for example, "
                    f'{role} = "{found[0].source}" under [columns] in the survey file.'
                )
                problems.append(text)
                for b in found:
                    left[b.source] = text
                continue
            for b in found:
                if b not in kept:
                    left[b.source] = f'"{kept[0].source}" is used for {role}'
            if len(same) != len(found):
                others = ", ".join(f'"{b.source}"' for b in found if b not in kept)
                notes.append(f'"{kept[0].source}" was used for {role}, not {others}.')
            found = kept
        chosen.extend(found)
    chosen.sort(key=lambda b: b.index)
    missing = [
        f'{role} = "{name}"' for role, name in choices.names.items() if index_of(name) is None
    ]
    if missing:
        notes.append(
            f"The survey file names columns that this file does not have: {', '.join(missing)}."
        )
    return Recognition(
        tuple(chosen),
        left,
        tuple(headers[i].name for i in sorted(ignored)),
        tuple(notes),
        tuple(problems),
    )


def _with_unit(binding: Binding, header: Header, choices: ColumnChoices, where: str) -> Binding:
    """The binding with its unit: the survey file's, else the header's, the metadata's, the units row's."""
    role = binding.role
    column = COLUMNS.get(role)
    if role in choices.units:
        text, how = choices.units[role], "survey file"
    else:
        offers = [
            (text.strip(), how)
            for text, how in (
                (binding.unit, "header"),
                (header.metadata, "metadata"),
                (header.units_row, "units row"),
            )
            if text.strip()
        ]
        if column is not None and column.kind == "number" and len(offers) > 1:
            known = [(t, h, unit_of(t, column.unit)) for t, h in offers]
            different = {(c.multiply, c.divide, c.offset) for _t, _h, c in known if c is not None}
            if len(different) > 1:
                raise InputError(
                    f'Column "{header.name}" has two units.',
                    where=where,
                    found=", ".join(f'"{t}" in the {h}' for t, h, _ in known),
                    advice=f'Write {role} = "{offers[0][0]}" under [columns.units] in the survey file.',
                )
        text, how = offers[0] if offers else ("", "")
    if column is None or column.kind != "number":
        return replace(binding, unit=text, how=how)
    if not text:
        return replace(binding, convert=Conversion(column.unit))
    found = unit_of(text, column.unit)
    if found is None:
        if how in ("metadata", "units row") and column.unit == ONE:
            return replace(binding, convert=Conversion(ONE), unit="", how="")
        raise InputError(
            f'The unit of column "{header.name}" is not a unit of {role}.',
            where=where,
            found=f'"{text}" in the {how}',
            expected=f"a unit of {column.unit}",
            advice=f'Write {role} = "{column.unit}" (or what is true) under [columns.units] in the survey file.',
        )
    return replace(binding, unit=text, how=how, convert=found)


def _advice(name: str) -> str:
    """What to write for a name that is not recognised, where it can be told."""
    if len(name) > LONGEST_NAME:
        return ""
    for base, _unit, _certain in _readings(name):
        key = plain(base)
        if key in _DOUBTFUL:
            return f'"{name}" may be {_DOUBTFUL[key]}: say which in [columns] of the survey file.'
    key = plain(_readings(name)[0][0])
    if len(key) < 4:
        return ""
    close = difflib.get_close_matches(key, ROLES, n=1, cutoff=0.84)
    if close and ROLES[close[0]] in COLUMNS:
        role = ROLES[close[0]]
        return f'"{name}" may be {role}: if so, write {role} = "{name}" under [columns] in the survey file.'
    return ""


WIDE_ROLES = ("beam_angle", "depth", "slant_range", "two_way_time", "accepted", "rejected")


def wide_groups(headers: Sequence[Header]) -> dict[str, list[tuple[int, int]]]:
    """Beam columns side by side: stem as written -> (column index, its number), where at least 3 belong together."""
    groups: dict[str, list[tuple[int, int]]] = {}
    for index, header in enumerate(headers):
        if len(header.name) > LONGEST_NAME:
            continue
        found = _NUMBERED.match(header.name.strip())
        if found is None:
            bracketed = re.match(
                r"^(.*?)[\s_.\-]*(\d{1,4})\s*(\(.*\)|\[.*\]|_[a-z]+)$", header.name.strip()
            )
            if bracketed is None:
                continue
            stem, number = f"{bracketed[1]} {bracketed[3]}", int(bracketed[2])
        else:
            stem, number = found[1], int(found[2])
        if not stem:
            continue
        matched = _match(stem.strip(" _.-#"))
        if matched is None:
            # "Depth_B017_m": the letter or word only says that the number is a beam's
            stem = re.sub(r"(?i)[\s_.\-#]+(?:b|bm|beam)(?=[\s_.\-#]*(?:$|[\s(\[_]))", " ", stem)
            matched = _match(stem.strip(" _.-#"))
        if matched is None or matched[0] not in WIDE_ROLES:
            continue
        groups.setdefault(stem.strip(" _.-#"), []).append((index, number))
    return {
        stem: sorted(members, key=lambda m: m[1])
        for stem, members in groups.items()
        if len(members) >= 3 and len({n for _, n in members}) == len(members)
    }


__all__ = [
    "METRE",
    "TIME_PARTS",
    "WIDE_ROLES",
    "Binding",
    "Header",
    "Recognition",
    "plain",
    "recognise",
    "unit_of",
    "wide_groups",
]
