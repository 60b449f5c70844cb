"""What people call our tables, columns and closed values: words of the trade, in plain words without units.

Owns the words only; how they are matched is mapping.py's.
"""

from typing import Final

TABLE_WORDS: Final = {
    "sites": "site;building;buildings;facilities;properties;customers;enrolment;enrollment",
    "chillers": "chiller;machines;chiller plant;chiller list",
    "tanks": "tank;storage;ice storage;thermal storage;tes;ice tanks;cool storage",
    "nodes": "node;feeders;substations;network;grid",
    "node_loads": "feeder loads;substation loads",
    "weather": "weather forecast;forecast;weather data",
    "loads": "load;cooling loads;load forecast",
    "tariffs": "tariff;prices;rates;energy prices",
    "bills": "bill;billing",
    "status": "tank levels;plant status;levels",
    "holidays": "holiday;public holidays",
    "plant_days": "plant log;days;operator log",
    "meter_map": "meter list",
    "meters": "meter;readings;meter readings;interval data;meter data",
    "fleet.toml": "fleet;settings;general;programme;program;project",
}
"""By table: names of sheets."""

_TIME: Final = (
    "time;date;datetime;date time;timestamp;start;hour;interval;local time;from;period;hour starting"
)

COLUMN_WORDS: Final = {
    "site_id": "site;building;site name;building name;facility;customer;property;name;site number",
    "node_id": "node;feeder;substation;node name",
    "parent_id": "parent;fed from;upstream;above",
    "tariff_id": "tariff;rate schedule;tariff name",
    "station_id": "station;weather station;location",
    "building_type": "type;building type;use;building use;category;kind",
    "floor_area_m2": "floor area;area;conditioned area;conditioned floor area;gross floor area;gfa;size",
    "peak_cooling_kw_th": "peak cooling;peak load;peak cooling load;design load;design cooling load;cooling peak;"
    "design cooling",
    "critical_kw_th": "critical;critical load;critical cooling;critical cooling load",
    "held_back_kwh_th": "held back;reserve;reserved inventory",
    "strategy": "control strategy;operating strategy;operation;mode of operation",
    "layout": "arrangement",
    "occupied_from_hour": "occupied from;open from;opens;opening;opening time;opening hour",
    "occupied_to_hour": "occupied to;occupied until;open to;open until;closes;closing;closing time;closing hour",
    "rise_limit_k": "allowed rise;temperature limit;comfort limit;rise limit",
    "notice_minutes": "notice;notice time;notice period",
    "minimum_window_minutes": "minimum window;shortest window",
    "calls_per_season": "max calls;maximum calls;calls per year",
    "hours_per_season": "max hours;maximum hours;hours per year",
    "call_fee": "fee;fee per call",
    "demand_price_per_kw": "demand charge;demand price",
    "site_words": "contact;remarks",
    "chiller_id": "chiller;machine;tag;unit;chiller name;name;chiller tag;id",
    "tank_id": "tank;tag;unit;tank name;name;tank tag;id",
    "kind": "type;chiller type;tank type;technology;storage type;machine type",
    "capacity_kw_th": "capacity;size;cooling capacity;rated capacity;nominal capacity;tonnage;rating",
    "capacity_kwh_th": "capacity;size;storage capacity;usable capacity;storage;nominal capacity",
    "rated_cop": "cop;efficiency;rated efficiency;full load efficiency;eer",
    "loading_order": "sequence;order;start order;lead lag",
    "makes_ice": "ice making;ice duty;dual duty;can make ice",
    "loss_fraction_per_h": "standing loss;loss",
    "discharge_limit_kw_th": "max discharge;maximum discharge;discharge rate;max discharge rate",
    "charge_limit_kw_th": "max charge;maximum charge;charge rate;max charge rate",
    "import_limit_kw": "import limit;limit;rating",
    "other_kw": "other load;load",
    "interval_start": _TIME,
    "time": _TIME,
    "dry_bulb_c": "temperature;temp;dry bulb;dry bulb temperature;outdoor temperature;outside temperature;"
    "outside air temperature;oat;air temperature;outdoor temp;air temp",
    "wet_bulb_c": "wet bulb;wet bulb temperature",
    "rh_pct": "humidity;relative humidity;rh;rel humidity",
    "cooling_load_kw_th": "cooling load;load;cooling",
    "rest_kw": "other load;rest;base load;non cooling load;rest of building",
    "price_per_kwh": "price;energy price;rate;energy rate",
    "billed_peak_kw": "billed peak;peak demand;billed demand;peak",
    "cycle_start": "from;start;cycle from",
    "cycle_end": "to;end;until;cycle to",
    "unit_id": "unit;tank;chiller;equipment;tag",
    "inventory_kwh_th": "inventory;level;tank level;charge",
    "available": "in service;availability",
    "date": "day;holiday date",
    "name": "fleet name;fleet;holiday;programme name;project name",
    "day": "date",
    "mode": "plant mode;state",
    "meter_id": "meter;meter number;meter name",
    "kw": "power;demand;reading;value;load",
    "timezone": "time zone;tz",
    "energy_price_per_kwh": "energy price;price;electricity price;energy rate;tariff",
    "interval_minutes": "interval;interval length;time step",
}
"""By column, in whichever tables have it."""

VALUE_WORDS: Final = {
    "air_cooled_screw": "air cooled;screw;air cooled chiller;air cooled screw chiller",
    "water_cooled_centrifugal": "centrifugal;water cooled;water cooled chiller;centrifugal chiller;turbo",
    "ice_internal_melt": "internal melt;ice on coil internal melt;internal melt ice",
    "ice_external_melt": "external melt;ice on coil external melt;external melt ice;ice harvester",
    "chilled_water": "chilled water tank;water;stratified;stratified water;chw;chilled water storage",
    "ice_encapsulated": "encapsulated ice;encapsulated;ice balls",
    "eutectic_salt": "eutectic;eutectic salts;phase change salt",
    "concert_hall": "theatre;theater;auditorium",
    "courthouse": "court;law court",
    "school": "university;college",
    "hospital": "clinic;medical centre",
    "laboratory": "lab;research",
    "retail": "shop;store;mall;supermarket",
    "hotel": "hotel tower",
    "office": "offices;office building;office tower",
    "full_storage": "full",
    "load_levelling": "load leveling;levelling;leveling;partial storage load levelling",
    "chiller_priority": "chiller first;chillers first;chiller upstream priority",
    "storage_priority": "storage first;ice priority;ice first;tank priority",
}
"""By value of a closed list."""
