"""A whole study: its records, and every fault at once."""

from __future__ import annotations

import math
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest
from study_helpers import Spoiler

from compsize.errors import InputError, OutputError
from compsize.study.new import write_starter
from compsize.study.read_study import read_study
from compsize.study.records import Growth
from compsize.study.schema_keys import NETWORK_KEYS, STUDY_SECTIONS


def test_the_starter_study_is_right(study: Spoiler) -> None:
    """What `new` writes passes every check and holds what its files say."""
    read = read_study(study.folder)
    assert read.title == "Starter study"
    assert len(read.network.buses.bus) == 6
    assert read.growth.loads == ("Ellismere", "Oakhollow", "Saltmarsh", "Winterby")
    assert read.growth.base_mw == 250.0
    assert [(need.cases, need.margin_mw, need.margin_pct, need.of) for need in read.requirements] == [
        ("intact", None, 15.0, "growing"),
        ("outages", 30.0, None, "growing"),
    ]
    assert [candidate.site for candidate in read.candidates] == ["Ellismere", "Oakhollow", "Saltmarsh", "Saltmarsh"]
    assert [candidate.site_cost for candidate in read.candidates] == [3e5, 2.5e5, 2.5e5, 2.5e5]
    assert read.candidates[3].equipment.kind == "svc"
    assert read.limits.max_sites == 3
    assert read.limits.budget is None
    assert read.voltage.post_outage_min_pu == 0.9
    assert read.voltage.intact_min_pu is None
    assert read.voltage.given
    assert read.stages is None
    assert read.report.price_year == "2025"
    assert read_study(study.path("study.toml")).hash == read.hash


def test_the_starter_study_teaches_every_key(study: Spoiler) -> None:
    """Every key and section of a study, and every key of a network, stands in the starter study."""
    text = study.path("study.toml").read_text()
    for section in STUDY_SECTIONS.values():
        assert f"[{section.name}]" in text or not section.name
        for name in section.names:
            assert f"{name} = " in text, name
    assert all(f"{name} = " in study.path("network/network.toml").read_text() for name in NETWORK_KEYS.names)


def test_the_starter_study_never_lands_on_others(tmp_path: Path) -> None:
    """A folder that holds anything, or a file, is refused and left as it is."""
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(OutputError, match="is not empty"):
        write_starter(tmp_path)
    with pytest.raises(OutputError, match="is a file"):
        write_starter(tmp_path / "notes.txt")
    assert [path.name for path in tmp_path.iterdir()] == ["notes.txt"]
    (tmp_path / "empty").mkdir()
    assert (write_starter(tmp_path / "empty") / "study.toml").exists()


def test_every_mistake_of_a_study_is_reported_at_once(study: Spoiler) -> None:
    """Twenty different mistakes in eight files give twenty faults with file, row or key, and remedy."""
    study.swap("study.toml", 'pickup = "proportional"', 'pickup = "proportionally"')
    study.swap("study.toml", "slack_limits = false", "slack_limit = false")
    study.swap("study.toml", 'cases = "outages"', 'cases = "doubles"')
    study.swap("study.toml", 'of = "growing"', 'of = "area:Sout"')
    study.swap("study.toml", "post_outage_min_pu = 0.90", 'post_outage_min_pu = "0.90"')
    study.swap("study.toml", "max_sites = 3", "max_sites = 2.5")
    study.swap("study.toml", "[report]", "[limit]\nbudget = 1\n\n[report]")
    study.swap("network/network.toml", "base_mva = 100.0", "base_mva = 0")
    study.swap("network/buses.csv", "Oakhollow,115,0.95", "Oakhollow,115 kV,0.95")
    study.swap("network/loads.csv", "Saltmarsh,Saltmarsh", "Saltmarsh,Saltmarsch")
    study.swap("network/branches.csv", "rating_mva", "rating")
    study.swap("network/generators.csv", "-25,35", "45,35")
    study.swap("contingencies.csv", "generator,Winterby G1,unit", "generator,Winterby G2,unit")
    study.append("contingencies.csv", "intact,branch,Tarnmoor T1,\nMixed,breaker,Tarnmoor T1,\n")
    study.swap("candidates.csv", "Ellismere,Bank 115 kV 15 Mvar,4", "Elismere,Bank 115 kV 15 Mvar,4")
    study.swap("candidates.csv", "Oakhollow,Bank 115 kV 15 Mvar,4", "Oakhollow,Bank 115kV 15 Mvar,4")
    study.append("candidates.csv", "Winterby,SVC 115 kV 50 Mvar,-1,\n")
    study.swap("equipment.csv", "bank,15", "banks,15")
    study.swap("equipment.csv", "50,6000000", "fifty,6000000")
    found = [(fault.file, fault.row, fault.column) for fault in study.faults()]
    assert sorted(found, key=str) == sorted(
        [
            ("study.toml", None, "growth.pickup"),
            ("study.toml", None, "growth.slack_limit"),
            ("study.toml", None, "requirement[2].cases"),
            ("study.toml", None, "requirement[1].of"),
            ("study.toml", None, "voltage.post_outage_min_pu"),
            ("study.toml", None, "limits.max_sites"),
            ("study.toml", None, "limit"),
            ("network/network.toml", None, "base_mva"),
            ("network/buses.csv", 5, "kv"),
            ("network/loads.csv", 4, "bus"),
            ("network/branches.csv", None, "rating"),
            ("network/generators.csv", 3, "q_min_mvar"),
            ("contingencies.csv", 2, "element"),
            ("contingencies.csv", 5, "contingency"),
            ("contingencies.csv", 6, "kind"),
            ("candidates.csv", 2, "site"),
            ("candidates.csv", 3, "equipment"),
            ("candidates.csv", 6, "max_steps"),
            ("equipment.csv", 2, "kind"),
            ("equipment.csv", 3, "step_mvar"),
        ],
        key=str,
    )
    assert all(fault.remedy for fault in study.faults())
    with pytest.raises(InputError, match="20 faults in the input"):
        read_study(study.folder)


@pytest.mark.parametrize(
    ("old", "new", "column", "words"),
    [
        ('network = "network"', 'network = "nowhere"', "network", "there is no 'nowhere'"),
        ('network = "network"', 'network = "../../network"', "network", "leaves the study folder"),
        ('network = "network"', 'network = ".."', "network", "leaves the study folder"),
        ('network = "network"', 'network = "/etc"', "network", "is not a relative path"),
        ('network = "network"', "network = 'C:\\network'", "network", "is not a relative path"),
        ('network = "network"', 'network = ""', "network", "the path is blank"),
        ('network = "network"', "", "network", "the required key 'network' is missing"),
        ('"contingencies.csv"', '"../contingencies.csv"', "contingencies.table", "leaves the study folder"),
        ('"contingencies.csv"', '"network/../../x.csv"', "contingencies.table", "leaves the study folder"),
        ('"contingencies.csv"', '"contingency.csv"', "contingencies.table", "does not exist"),
        ('table = "candidates.csv"', "", "candidates.table", "the required key 'candidates.table' is missing"),
        ('{ area = "South" }', '{ area = "Sout" }', "growth.loads", "there is no area 'Sout'. Did you mean 'South'?"),
        ('{ area = "South" }', '{ area = "North" }', "growth.loads", "the area 'North' has no load in service"),
        ('{ area = "South" }', '{ zone = "South" }', "growth.loads.zone", "unknown key 'zone'"),
        ('{ area = "South" }', '{ area = "South", group = "coast" }', "growth.loads", "one group or one area"),
        ('{ area = "South" }', '["Ellismere", "Elismere"]', "growth.loads", "no load 'Elismere'. Did you mean"),
        ('{ area = "South" }', '["Ellismere", "Ellismere"]', "growth.loads", "listed twice"),
        ('{ area = "South" }', "[]", "growth.loads", "the list of loads is empty"),
        ('{ area = "South" }', "[1]", "growth.loads", "'1' is not a text"),
        ('{ area = "South" }', '"al"', "growth.loads", "'al' selects no loads"),
        ('power_factor = "as base"', "power_factor = 1.2", "growth.power_factor", "'1.2' is not a power factor"),
        ('power_factor = "as base"', "power_factor = 0", "growth.power_factor", "is not a power factor"),
        ('power_factor = "as base"', "power_factor = true", "growth.power_factor", "is not a power factor"),
        ('pickup = "proportional"', 'pickup = "table"', "growth.pickup", "no unit in service has a share"),
        ("margin_mw = 30.0", "", "requirement[2].margin_mw", "neither margin_mw nor margin_pct"),
        ("margin_mw = 30.0", "margin_mw = -1", "requirement[2].margin_mw", "-1 is out of range"),
        ('cases = "outages"', "", "requirement[2].cases", "is missing"),
        ('of = "growing"', 'of = "all"', "requirement[1].of", "'all' is not a base of margin_pct"),
        ('of = "growing"', 'of = "area:North"', "requirement[1].of", "has no load with positive MW"),
        ('bank_outage = "step"', 'bank_outage = "steps"', "contingencies.bank_outage", "Did you mean 'step'?"),
        ("all_branches = true", "all_branches = 1", "contingencies.all_branches", "1 is not true or false"),
        ("post_outage_min_pu = 0.90", "post_outage_min_pu = 1.2", "voltage.post_outage_min_pu", "is above"),
        ("post_outage_min_pu = 0.90", "post_outage_min = 0.90", "voltage.post_outage_min", "'post_outage_min_pu'"),
        ("max_sites = 3", "max_sites = -3", "limits.max_sites", "-3 is out of range"),
        ('currency = "USD"', "currency = []", "report.currency", "[] is not a text"),
    ],
)
def test_each_key_names_its_fault(study: Spoiler, old: str, new: str, column: str, words: str) -> None:
    """One wrong key gives exactly one fault that names it and says what is wrong."""
    study.swap("study.toml", old, new)
    fault = study.only_fault()
    assert (fault.file, fault.column) == ("study.toml", column)
    assert words in str(fault)
    assert fault.remedy


@pytest.mark.parametrize(
    ("file", "old", "new", "words"),
    [
        (
            "contingencies.csv",
            "Loss of",
            "branch:Loss of",
            "row 2, contingency: the name 'branch:Loss of Winterby G1' is",
        ),
        ("contingencies.csv", "Loss of", "bank:Loss of", "is reserved. Choose another name."),
        ("contingencies.csv", ",unit", ",outages", "row 2, class: the class 'outages' is reserved."),
        ("contingencies.csv", "Saltmarsh,double", "Saltmarsh,single", "row 4, class: 'Both Ellismere"),
        ("contingencies.csv", "branch,Winterby-Saltmarsh", "branch,Ellismere-Winterby", "row 4, element: 'Both Ellis"),
        ("contingencies.csv", "branch,Winterby-Saltmarsh", "shunt,Winterby-Saltmarsh", "there is no shunt 'Winterby-S"),
        ("candidates.csv", "max_steps", "steps", ""),
        (
            "candidates.csv",
            "Saltmarsh,SVC 115 kV 50 Mvar,1,",
            "Saltmarsh,SVC 115 kV 50 Mvar,1.5,",
            "row 5, max_steps: '1.5'",
        ),
        ("candidates.csv", "Mvar,1,", "Mvar,1,9", "row 5, site_cost: the site 'Saltmarsh' has the site_cost 9 here"),
        ("candidates.csv", "SVC 115 kV 50", "Bank 115 kV 15", "row 5, equipment: the site 'Saltmarsh' lists"),
        (
            "equipment.csv",
            "115,25,2",
            "345,25,2",
            "candidates.csv, row 5, equipment: 'SVC 115 kV 50 Mvar' is rated 345 kV",
        ),
        ("equipment.csv", "320000,115,,", "320000,115,5,", "equipment.csv, row 2, q_absorb_mvar: a bank has no"),
        ("equipment.csv", "320000,115", "-320000,115", "equipment.csv, row 2, cost_per_step: -320000 is out of range."),
    ],
)
def test_each_table_names_its_fault(study: Spoiler, file: str, old: str, new: str, words: str) -> None:
    """One wrong cell gives exactly one fault; a renamed required column gives two."""
    study.swap(file, old, new)
    found = study.faults()
    assert len(found) == (1 if words else 2), [str(fault) for fault in found]
    assert words in str(found[0])


def test_existing_steps_count_inside_max_steps(study: Spoiler) -> None:
    """More existing steps than max_steps is a fault; as many are not."""
    text = "site,equipment,max_steps,existing_steps\nSaltmarsh,Bank 115 kV 15 Mvar,2,{}\n"
    study.write("candidates.csv", text.format(2))
    assert read_study(study.folder).candidates[0].existing_steps == 2
    study.write("candidates.csv", text.format(3))
    assert "row 2, existing_steps: existing_steps is above max_steps." in str(study.only_fault())


def test_a_study_needs_a_requirement_that_can_apply(study: Spoiler) -> None:
    """No requirement, outages where none exist, and bank outages switched off are faults."""
    text = study.path("study.toml").read_text()
    start, end = text.index("\n[[requirement]]"), text.index("\n[contingencies]")
    without = text[:start] + text[end:]
    study.write("study.toml", without)
    assert "there is no [[requirement]]" in str(study.only_fault())
    bare = 'network = "network"\n[[requirement]]\ncases = "{}"\nmargin_mw = 5\n{}'
    study.write("study.toml", bare.format("outages", ""))
    assert "the study lists no outages" in str(study.only_fault())
    study.write("study.toml", bare.format("bank_outage", '[contingencies]\nbank_outage = "none"\n'))
    assert 'contingencies.bank_outage is "none"' in str(study.only_fault())
    study.write("study.toml", bare.format("branch", "[contingencies]\nall_branches = true\n"))
    assert study.faults() == []
    study.write("study.toml", bare.format("outages", "[contingencies]\nall_branches = true\n"))
    assert study.faults() == []
    study.write("study.toml", bare.format("intact", ""))
    assert study.faults() == []


def test_a_folder_without_a_study_is_one_fault(tmp_path: Path) -> None:
    """A missing folder, a folder without study.toml and broken TOML are told apart."""
    with pytest.raises(InputError, match=r"does not exist\. Name a study folder"):
        read_study(tmp_path / "none")
    with pytest.raises(InputError, match=r"holds no study\.toml"):
        read_study(tmp_path)
    (tmp_path / "study.toml").write_text('title = "x"\nnetwork = network\n')
    with pytest.raises(InputError, match=r"study\.toml, row 2: the TOML syntax is wrong"):
        read_study(tmp_path)


def growth(study: Spoiler, loads: str, factor: str = '"as base"') -> Growth:
    """The growth of the study with another selection and power factor."""
    study.swap("study.toml", 'loads = { area = "South" }', f"loads = {loads}")
    study.swap("study.toml", 'power_factor = "as base"', f"power_factor = {factor}")
    return read_study(study.folder).growth


MIXED = (
    "load,bus,p_mw,q_mvar,group,status\n"
    "a,Oakhollow,60,20,g,\nb,Saltmarsh,0,8,g,\nc,Winterby,-20,5,g,\nd,Winterby,50,10,h,\ne,Winterby,70,10,g,off\n"
)


def test_all_loads_grow_in_proportion_and_off_loads_do_not(study: Spoiler) -> None:
    """ "as base" scales P and Q together, of reactive-only and negative loads too, and passes over off loads."""
    study.write("network/loads.csv", MIXED)
    read = growth(study, '"all"')
    assert read.loads == ("a", "b", "c", "d")
    assert read.dp_mw == (60.0, 0.0, -20.0, 50.0)
    assert read.dq_mvar == (20.0, 8.0, 5.0, 10.0)
    assert read.base_mw == 90.0
    assert read.power_factor == "as base"


@pytest.mark.parametrize(("factor", "ratio"), [("0.95", 0.32868410517886), ("-0.8", -0.75), ("1", 0.0), ("-1.0", 0.0)])
def test_a_power_factor_applies_to_positive_loads(study: Spoiler, factor: str, ratio: float) -> None:
    """dq = dp tan(acos pf), lagging positive, leading negative; other loads keep P and Q in proportion."""
    study.write("network/loads.csv", MIXED)
    read = growth(study, '{ group = "g" }', factor)
    assert read.loads == ("a", "b", "c")
    assert read.dq_mvar == pytest.approx((60.0 * ratio, 8.0, 5.0), abs=1e-9)
    assert ratio == pytest.approx(math.copysign(math.tan(math.acos(abs(float(factor)))), float(factor)), abs=1e-9)


def test_naming_a_load_out_of_service_is_a_fault(study: Spoiler) -> None:
    """A list must not name a load that is off."""
    study.write("network/loads.csv", MIXED)
    study.swap("study.toml", '{ area = "South" }', '["a", "e"]')
    assert "the load 'e' is out of service" in str(study.only_fault())


def test_loads_of_nothing_give_no_direction(study: Spoiler) -> None:
    """Loads that are all 0 MW, or add up to less than nothing, cannot grow in proportion."""
    study.write("network/loads.csv", MIXED)
    study.swap("study.toml", '{ area = "South" }', '["b"]')
    assert "every load that should grow has 0 MW today" in str(study.only_fault())
    study.swap("study.toml", '["b"]', '["b", "c"]')
    assert "the load direction adds up to -20 MW" in str(study.only_fault())
    study.swap("study.toml", '["b", "c"]', '"all"')
    study.write("network/loads.csv", "load,bus,p_mw,q_mvar\n")
    assert "the network has no load in service" in str(study.faults()[0])


def by_table(study: Spoiler, table: str, factor: str = '"as base"') -> None:
    """Gives the study a growth table."""
    study.write("network/loads.csv", MIXED)
    study.write("growth.csv", table)
    study.swap("study.toml", 'loads = { area = "South" }', 'table = "growth.csv"')
    study.swap("study.toml", 'power_factor = "as base"', f"power_factor = {factor}")


def test_a_growth_table_sets_the_direction(study: Spoiler) -> None:
    """dp and dq of the table are the direction, also of a load that is 0 MW today; blank dq: the power factor."""
    by_table(study, "load,dp_mw,dq_mvar\nb,3,1\na,1,-0.5\nd,2,\n", "0.8")
    read = read_study(study.folder).growth
    assert read.loads == ("b", "a", "d")
    assert read.dp_mw == (3.0, 1.0, 2.0)
    assert read.dq_mvar == pytest.approx((1.0, -0.5, 1.5))
    assert read.base_mw == 110.0


def test_a_growth_table_without_dq_keeps_the_loads_proportion(study: Spoiler) -> None:
    """ "as base" fills blank dq by the load's own P and Q, which a load of 0 MW does not have."""
    by_table(study, "load,dp_mw\na,3\n")
    assert read_study(study.folder).growth.dq_mvar == pytest.approx((1.0,))
    study.write("growth.csv", "load,dp_mw\na,3\nb,3\n")
    assert "growth.csv, row 3, dq_mvar: dq_mvar is blank and the load has 0 MW today" in str(study.only_fault())


@pytest.mark.parametrize(
    ("table", "words"),
    [
        ("load,dp_mw,dq_mvar\na,1,0\nx,1,0\n", "growth.csv, row 3, load: there is no load 'x'"),
        ("load,dp_mw,dq_mvar\na,1,0\na,1,0\n", "growth.csv, row 3, load: the load 'a' stands twice"),
        ("load,dp_mw,dq_mvar\na,1,0\ne,1,0\n", "growth.csv, row 3, load: the load 'e' is out of service"),
        ("load,dp_mw,dq_mvar\na,1,0\nb,-1,0\n", "growth.table: the load direction adds up to 0 MW"),
        ("load,dp_mw,dq_mvar\n", "growth.csv: the table has no rows"),
    ],
)
def test_faults_of_a_growth_table(study: Spoiler, table: str, words: str) -> None:
    """Each wrong row of a growth table is a fault that names it."""
    by_table(study, table)
    assert words in str(study.faults()[0])


def test_loads_and_table_exclude_each_other(study: Spoiler) -> None:
    """Two directions are a contradiction."""
    study.write("growth.csv", "load,dp_mw,dq_mvar\nOakhollow,1,0\n")
    study.swap("study.toml", "power_factor =", 'table = "growth.csv"\npower_factor =')
    assert "both 'loads' and 'table' are given" in str(study.faults()[0])


def test_headroom_needs_room(study: Spoiler) -> None:
    """Pick-up by headroom needs a unit with p_max_mw above p_mw."""
    study.swap("study.toml", 'pickup = "proportional"', 'pickup = "headroom"')
    assert study.faults() == []
    study.swap("network/generators.csv", ",600,", ",,")
    study.swap("network/generators.csv", ",90,", ",70,")
    assert "no unit in service has p_max_mw above p_mw" in str(study.only_fault())


def test_percent_of_nothing_is_a_fault(study: Spoiler) -> None:
    """margin_pct of growing loads that are 0 MW today has no meaning; of the total it has."""
    by_table(study, "load,dp_mw,dq_mvar\nb,3,1\n")
    assert "requirement[1].of: the growing loads have no positive MW today" in str(study.only_fault())
    study.swap("study.toml", 'of = "growing"', 'of = "total"')
    assert study.faults() == []


def test_events_keep_order_class_and_elements(study: Spoiler) -> None:
    """Rows sharing a name are one event; a blank class follows the others; single branches come after."""
    study.swap("contingencies.csv", "Ellismere-Winterby,double", "Ellismere-Winterby,")
    cases = read_study(study.folder).contingencies
    assert [(event.name, event.klass) for event in cases.events[:3]] == [
        ("Loss of Winterby G1", "unit"),
        ("Both Ellismere-Winterby and Winterby-Saltmarsh", "double"),
        ("branch:Brackenfell-Tarnmoor 1", "branch"),
    ]
    assert cases.events[1].elements == (("branch", "Ellismere-Winterby"), ("branch", "Winterby-Saltmarsh"))
    assert len(cases.events) == 2 + 9
    assert cases.left_out == ()


def test_all_branches_leaves_out_what_splits_the_network(study: Spoiler) -> None:
    """A radial branch is listed as left out, one of two parallel ones is not, one out of service is neither."""
    study.append("network/buses.csv", "Farend,115,0.95,1.05,South,yes,300\n")
    study.swap("network/branches.csv", "rating_mva\n", "rating_mva,status\n")
    lines = study.path("network/branches.csv").read_text().splitlines()
    lines = [lines[0], *(line + "," for line in lines[1:]), "Spur,Saltmarsh,Farend,0.02,0.08,0,1,80,on"]
    lines[2] = lines[2].removesuffix(",") + ",off"
    study.write("network/branches.csv", "\n".join(lines) + "\n")
    cases = read_study(study.folder).contingencies
    assert cases.left_out == ("Brackenfell-Tarnmoor 1", "Spur")
    names = [event.name for event in cases.events if event.klass == "branch"]
    assert "branch:Tarnmoor T1" in names
    assert not {"branch:Brackenfell-Tarnmoor 1", "branch:Brackenfell-Tarnmoor 2", "branch:Spur"} & set(names)


def test_a_listed_single_branch_stays_beside_all_branches(study: Spoiler) -> None:
    """A branch listed by hand and added by all_branches is two cases, since their classes may differ."""
    study.append("contingencies.csv", "Mine,branch,Tarnmoor T1,mine\n")
    events = read_study(study.folder).contingencies.events
    assert [event.name for event in events if event.elements == (("branch", "Tarnmoor T1"),)] == [
        "Mine",
        "branch:Tarnmoor T1",
    ]


STAGES = '\n[stages]\ntable = "stages.csv"\ndiscount_rate_pct = 7.0\ncost_escalation_pct = 2.0\n'


def test_stages_read(study: Spoiler) -> None:
    """Years and MW of loads and groups are kept in the order of the file."""
    study.append("study.toml", STAGES)
    study.write("stages.csv", "year,valley,Winterby\n2026,215,41\n2030,240,45.5\n")
    stages = read_study(study.folder).stages
    assert stages is not None
    assert stages.years == (2026, 2030)
    assert stages.columns == ("valley", "Winterby")
    assert stages.mw == ((215.0, 41.0), (240.0, 45.5))
    assert (stages.discount_rate_pct, stages.cost_escalation_pct) == (7.0, 2.0)


@pytest.mark.parametrize(
    ("table", "words"),
    [
        (
            "year,valey\n2026,1\n",
            "stages.csv, valey: there is no load or group 'valey' in service. Did you mean 'valley'?",
        ),
        ("year,valley,Oakhollow\n2026,1,1\n", "the load 'Oakhollow' stands in the columns 'valley' and 'Oakhollow'"),
        ("year,valley\n2030,1\n2026,1\n", "stages.csv, row 3, year: the year 2026 does not come after 2030"),
        ("year,valley\n2026,1\n2026,1\n", "stages.csv, row 3, year: the year 2026 does not come after 2026"),
        ("year,valley\n2026,\n", "stages.csv, row 2, valley: the cell is blank. Write the MW"),
        ("year,valley\n2026,x\n", "stages.csv, row 2, valley: 'x' is not a number"),
        ("year,valley\n2026.5,1\n", "stages.csv, row 2, year: '2026.5' is not a whole number"),
        ("year\n2026\n", "stages.csv: no load or group has a column"),
        ("year,valley\n", "stages.csv: the table has no rows"),
        ("valley\n1\n", "stages.csv, year: the required column 'year' is missing"),
    ],
)
def test_faults_of_stages(study: Spoiler, table: str, words: str) -> None:
    """Each wrong year, column or cell of the stages is one fault that names it."""
    study.append("study.toml", STAGES)
    study.write("stages.csv", table)
    assert words in str(study.only_fault())


def test_the_hash_follows_content_and_not_place(study: Spoiler, tmp_path: Path) -> None:
    """A copied study with other line endings keeps its hash; one changed figure changes it."""
    before = read_study(study.folder)
    moved = tmp_path / "elsewhere" / "other name"
    shutil.copytree(study.folder, moved)
    for path in moved.rglob("*.*"):
        path.write_bytes(path.read_bytes().replace(b"\n", b"\r\n"))
    assert read_study(moved).hash == before.hash
    assert [name for name, _ in before.files] == [
        "study.toml",
        *(
            f"network/{name}"
            for name in ("network.toml", "buses.csv", "loads.csv", "branches.csv", "generators.csv", "shunts.csv")
        ),
        "contingencies.csv",
        "equipment.csv",
        "candidates.csv",
    ]
    study.swap("network/loads.csv", "75,26", "75,27")
    assert read_study(study.folder).hash != before.hash


def test_a_network_may_lie_beside_the_study(study: Spoiler) -> None:
    """network = "../network" names a sibling of the study folder, and its files are named so."""
    shutil.move(study.path("network"), study.folder.parent / "grid")
    study.swap("study.toml", 'network = "network"', 'network = "../grid"')
    assert "../grid/buses.csv" in dict(read_study(study.folder).files)


def test_a_link_out_of_the_study_is_refused(study: Spoiler, tmp_path: Path) -> None:
    """A link does not lead a table out of the study folder."""
    shutil.move(study.path("equipment.csv"), tmp_path / "equipment.csv")
    study.path("equipment.csv").symlink_to(tmp_path / "equipment.csv")
    assert "candidates.equipment: 'equipment.csv' leaves the study folder" in str(study.only_fault())


def test_a_study_on_a_large_network_reads(tmp_path: Path, shared: Callable[[str], Path]) -> None:
    """All single branches of the 2,869-bus network are cases or are left out, each once."""
    shutil.copytree(shared("networks/pegase2869"), tmp_path / "network")
    (tmp_path / "study.toml").write_text(
        'network = "network"\n[contingencies]\nall_branches = true\n[[requirement]]\ncases = "outages"\nmargin_mw = 5\n'
    )
    cases = read_study(tmp_path).contingencies
    assert len(cases.events) + len(cases.left_out) == 4582
    assert len(cases.left_out) > 0
