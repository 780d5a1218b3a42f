"""Methods with sources: two published checklists filled in from the scenario, gaps marked, and the flow of patients."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from analysis.report.blocks import Block, Figure, Heading, Points, Terms, Text
from analysis.report.contents import Figures, Results
from analysis.report.diagram import DESCRIPTION, patient_flow
from analysis.report.reading import Network
from analysis.report.words import GAP, counted, listed, name

TITLE = "Methods with sources"
SOURCES = (
    "Monks T, Currie CSM, Onggo BS, Robinson S, Kunc M, Taylor SJE. Strengthening the reporting of "
    "empirical simulation "
    "studies: introducing the STRESS guidelines. Journal of Simulation 13(1), 55-67, 2019 (the items "
    "in our words, from "
    "memory).",
    "Karnon J, Stahl J, Brennan A, Caro JJ, Mar J, Möller J. Modeling using discrete event simulation: a report of the "
    "ISPOR-SMDM modeling good research practices task force 4. 2012 (the practices in our words, from memory).",
    "Law AM. Simulation modeling and analysis: replications with a warm-up, and paired comparisons "
    "on common random numbers "
    "(from memory).",
    "Koutsoupias E, Papadimitriou C. Worst-case equilibria. 1999: the price of anarchy (from memory).",
)
STAGES = (
    "A gate of a unit closes when its load (occupied beds and beds reserved for patients on the "
    "road) reaches the threshold, "
    "and opens again when the load has fallen by the reopening gap. There are two, for the unit's own patients and for "
    "others'. No rule puts a patient where no bed is free.",
)


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    yield Heading("Logic of the model")
    yield flow(figures)
    yield from map(Text, STAGES)
    for network in results.networks:
        several = f", scenario {network.number}" if len(results.networks) > 1 else ""
        yield Heading(f"Reporting items of STRESS-DES{several}")
        yield Terms(tuple(_stress(results, network)))
        yield Heading(f"Good practices of the ISPOR-SMDM task force{several}")
        yield Terms(tuple(_practices(results, network)))
    yield Heading("Sources")
    yield Points(SOURCES)


def flow(figures: Figures) -> Figure:
    """The overview diagram, drawn by hand."""
    title = "How a patient finds a bed"
    return Figure(patient_flow(figures.number(), title), title, DESCRIPTION)


# ---- STRESS-DES ----


def _stress(results: Results, network: Network) -> Iterator[tuple[str, str]]:
    yield from _objectives(results, network)
    yield from _logic(network)
    yield from _data(network)
    yield from _experimentation(results, network)
    yield from _implementation(results, network)


def _objectives(results: Results, network: Network) -> Iterator[tuple[str, str]]:
    kinds = sorted({one.kind for one in results.all if one.network is network})
    yield "1.1 Purpose of the model", f"{GAP}why this region asks, and what will be decided with the answer"
    yield (
        "1.2 Outputs",
        (
            "by unit: utilisation, time full, closed, and closed with a free bed, admissions, "
            "patients moved and turned away by "
            "home; for the network: patients treated, moved and turned away"
        ),
    )
    yield "1.3 Aims of the experiments", f"commands run: {listed(kinds)}; {GAP}the hypotheses behind them"


def _logic(network: Network) -> Iterator[tuple[str, str]]:
    tables, told = network.tables, network.described
    yield "2.1 Overview diagram", "the figure above"
    yield (
        "2.2 Base logic",
        (
            "an emergency patient goes home if the home's own gate is open and a bed is free; else "
            "the units of the home's "
            "referral order are asked in turn; if none takes the patient the last resort decides"
            + ("" if told is None else f". Rules in force: {'; '.join(told['rules'].values())}")
        ),
    )
    policies = [name(row["name"]) for row in tables.get("policies", [])]
    yield (
        "2.3 Scenario logic",
        (f"policies of the file: {listed(policies)}" if policies else "no named policies in the file")
        + "; in a game every pair or tuple of the listed strategies is run",
    )
    yield (
        "2.4 Algorithms",
        (
            "arrivals by inversion of the cumulative rate; equilibria certified by regret; where an "
            "exact chain was used, its "
            "stationary equations"
        ),
    )
    yield (
        "2.5 Components",
        (
            f"entities: patients of {counted(len(tables['patients']), 'group')}; resources: the staffed beds of "
            f"{counted(len(tables['units']), 'unit')} ({_beds(tables)} in all); activities: stays and "
            "transfers; queues: none, a "
            "patient without a bed is moved or turned away; entry: an arrival at the home; exit: "
            "discharge or being turned away"
        ),
    )


def _beds(tables: Mapping[str, Any]) -> int:
    return sum(unit["beds"] for unit in tables["units"])


def _data(network: Network) -> Iterator[tuple[str, str]]:
    files = sorted({one for row in network.tables["patients"] for one in _files(row["stay"])})
    yield (
        "3.1 Data sources",
        (f"stays from {listed(files)}; " if files else "") + f"{GAP}where rates and stays come from",
    )
    yield "3.2 Pre-processing", f"{GAP}exclusions, missing values, transfers recorded as two stays"
    yield (
        "3.3 Input parameters",
        "the tables of units and patient groups above; the whole scenario file in the provenance",
    )
    yield (
        "3.4 Assumptions",
        (
            "arrivals are a Poisson stream with the rhythm that the scenario gives; stays are "
            "independent of each other, of the "
            f"load and of the closing of gates; patients do not return; {GAP}why these hold in this region"
        ),
    )


def _files(stay: Mapping[str, Any]) -> Iterator[str]:
    if "file" in stay:
        yield str(stay["file"])
    for part in stay.get("parts", []):
        yield from _files(part)


def _experimentation(results: Results, network: Network) -> Iterator[tuple[str, str]]:
    run = _run(network)
    advised = [
        f"in result “{name(one.label)}” MSER-5 advises {one.document['warm_up_advice']['days']:g} days"
        for one in results.of("simulate")
        if one.network is network and (one.document.get("warm_up_advice") or {}).get("days") is not None
    ]
    counts = [
        f"“{name(one.label)}” {counted(one.document['replications'], 'replication')}"
        for one in results.all
        if one.network is network and one.document.get("replications") is not None
    ]
    start = f"every unit is empty at the start; a warm-up of {run['warm_up_days']:g} days is not counted"
    length = f"{run['measured_days']:g} days are measured in each replication"
    chain = "not simulated: long-run values of the exact chain, or its course from a stated start"
    yield "4.1 Initialisation", "; ".join([start, *advised]) if counts else chain
    yield "4.2 Run length", length if counts else chain
    paired = "every policy and every cell of a table meets the same patients (common random numbers)"
    yield "4.3 Estimation", f"{listed(counts)}, each from draws of its own; {paired}" if counts else chain


def _run(network: Network) -> Mapping[str, Any]:
    """The run table with its defaults."""
    from sim.scenario.run import Run

    return Run().model_dump() | network.tables.get("run", {})


def _implementation(results: Results, network: Network) -> Iterator[tuple[str, str]]:
    own = [one.provenance for one in results.all if one.network is network]
    versions = own[0].get("versions", {})
    program = own[0].get("program", {})
    yield (
        "5.1 Software",
        (
            f"{program.get('name', 'brimline')} {program.get('version', '')}, Python "
            f"{versions.get('python', 'not recorded')}, "
            f"numpy {versions.get('numpy', 'not recorded')}"
        ),
    )
    yield (
        "5.2 Random sampling",
        (
            "all draws of a replication are made before it runs, from Philox streams addressed by "
            "seed, replication, patient "
            f"group and purpose; {'seeds ' + listed(sorted({str(one.get('seed')) for one in own}))}"
        ),
    )
    yield (
        "5.3 Execution",
        (
            "events in order of time; at one moment discharges, then arrivals by transfer, changes "
            "of staffing, reviews, new "
            f"arrivals; engines used: {listed(sorted({str(one.get('engine')) for one in own}))}"
        ),
    )
    machine = own[0].get("machine", {})
    yield "5.4 System", f"{machine.get('system', 'not recorded')}, {machine.get('processor', 'not recorded')}"
    yield (
        "6 Access",
        f"the commands and the scenario file are in the provenance; {GAP}where program and data can be had",
    )


# ---- good practices ----


def _practices(results: Results, network: Network) -> Iterator[tuple[str, str]]:
    verified = [one for one in results.of("verify") if one.network is network]
    held = [one for one in verified if one.document["agrees"]]
    yield (
        "Suits the question",
        "beds are limited and patients interact through them, which is what events in time are for",
    )
    yield "Structure agreed with those who know the service", f"{GAP}who was asked, and what they changed"
    yield (
        "Parameters from data, with their uncertainty",
        (
            "the share of the records in the error is in the comparison"
            if any(one.document.get("input_uncertainty") for one in results.of("compare"))
            else f"not part of these results; {GAP}how sure rates and stays are"
        ),
    )
    yield "Sensitivity to structure", f"{GAP}which other rules, last resorts and stays were tried"
    yield (
        "Enough replications",
        "a simulated number carries its interval or is said to have none; whether that is narrow enough is the "
        "reader's to judge",
    )
    yield "Warm-up", f"{_run(network)['warm_up_days']:g} days; see item 4.1"
    yield "Verification", (
        f"{counted(len(held), 'result')} of {len(verified)} agree with the exact chain" if verified
        else "not part of these results"
    )  # fmt: skip
    yield (
        "Agreement with the real network",
        f"{GAP}which records the model was held against, and how near it came",
    )
    yield (
        "Variance reduction",
        "common random numbers across policies and cells"
        + (
            "; control variates"
            if any((one.document.get("controls") or {}).get("used") for one in results.all)
            else ""
        ),
    )
    yield (
        "Spread of outcomes, not means alone",
        "intervals, distributions of occupied beds where simulated, bad years where asked for",
    )
    yield "Documentation", "this appendix and the provenance"
