"""The plan of a production: the parameters of every stage, resolved from the rules of the assembly."""

from collections.abc import Mapping
from functools import cache
from typing import Any

from keelbook.assembly.declaration import Assembly
from keelbook.blocks import DIMS as DIMENSIONS
from keelbook.blocks import Choice, CodeTable, MethodSet
from keelbook.contracts.assets import AssetRules, load_asset_rules
from keelbook.contracts.loader import parse_toml
from keelbook.contracts.measures import load_measures
from keelbook.contracts.parameters import Parameter, Parameters, declared_parameters
from keelbook.locate import folder
from keelbook.stages.decomposition import DecompositionParams
from keelbook.stages.deflation import DeflationParams
from keelbook.stages.harmonise import HarmoniseParams, SourcePlace
from keelbook.stages.income import IncomeParams
from keelbook.stages.labour import LabourParams
from keelbook.stages.services import ServicesParams
from keelbook.stages.shares import SharesParams
from keelbook.stages.starting_stock import StartParams
from keelbook.stages.stocks import StocksParams
from keelbook.stages.totals import Grouping
from keelbook.stages.valuation import ValuationParams

MEASURES_FILE = "keelbook/schemas/measures.toml"


def code_table(assembly: Assembly) -> CodeTable:
    """Return the codes of every dimension, in the order of the assembly's code lists."""
    return CodeTable({dim: assembly.lists.codes(dim) for dim in DIMENSIONS})


def harmonise_params(assembly: Assembly, parameters: Parameters) -> HarmoniseParams:
    lists = assembly.lists
    _, lines = parse_toml(folder("schemas") / "measures.toml")
    basis: Mapping[str, str] = parameters.get("status", "basis_of").value

    def resting_on(kind: str) -> frozenset[int]:
        return frozenset(lists.position("obs_status", code) for code, what in basis.items() if what == kind)

    parents = {code: lists.parent("asset", code) for code in lists.codes("asset")}
    partition_of = partitions(assembly)
    grouping = Grouping(
        {code: parent for code, parent in parents.items() if parent is not None},
        partition_of,
        tuple(dict.fromkeys(partition_of.values())),
    )
    return HarmoniseParams(
        measures=load_measures(),
        measures_file=MEASURES_FILE,
        measure_lines={name: lines["measure", name] for name in load_measures()},
        reference_year=assembly.reference_year,
        grouping=grouping,
        fill_method=as_choice(parameters.get("harmonise", "fill_method")),
        fill_measures=as_choice(parameters.get("harmonise", "fill_measures")),
        fill_longest=as_choice(parameters.get("harmonise", "fill_longest")),
        imputed=resting_on("imputed"),
        assumed=resting_on("assumed"),
        sources={
            source.name: SourcePlace("assembly.toml", assembly.line_of(source.name), source.annual_rate)
            for source in assembly.sources
        },
    )


def partitions(assembly: Assembly) -> dict[str, str]:
    """Return the partition of all workers that each worker group belongs to."""
    lists = assembly.lists
    found = {code: lists.partition("worker_group", code) for code in lists.codes("worker_group")}
    return {code: name for code, name in found.items() if name is not None}


def stage_params(assembly: Assembly, parameters: Parameters) -> Mapping[str, Any]:
    """Return the parameters of every stage by its name."""

    def choice(file: str, name: str) -> Choice:
        return as_choice(parameters.get(file, name))

    order = choice("deflation", "order")
    reference_year = Choice(
        "assembly.reference_year",
        assembly.reference_year,
        "assembly.toml",
        assembly.lines[("reference_year",)],
        "declared for the assembly",
    )
    return {
        "deflation": DeflationParams(order),
        "stocks": StocksParams(
            asset_sets(load_asset_rules(assembly.folder, assembly.lists)),
            choice("capital", "timing"),
            choice("capital", "age_price_mode"),
            StartParams(
                choice("capital", "initial_stock"),
                choice("capital", "trend_window"),
                choice("capital", "backcast_growth"),
                choice("capital", "link_window"),
                choice("capital", "warm_up_limit"),
                choice("capital", "negative_factor"),
                choice("capital", "assumed_limit"),
            ),
            order,
        ),
        "valuation": ValuationParams(
            choice("valuation", "price_bases"), choice("valuation", "chaining"), order, reference_year
        ),
        "labour": LabourParams(
            reference_year,
            partitions(assembly),
            choice("labour", "partition"),
        ),
        "income": IncomeParams(
            choice("income", "net_taxes"),
            choice("income", "cascade"),
            choice("income", "mixed_income_labour_fraction"),
            choice("income", "relative_earnings"),
        ),
        "services": ServicesParams(
            deflation_order=order,
            reference_year=reference_year,
            **{name: choice("services", name) for name in declared_parameters()["services"]},
        ),
        "shares": SharesParams(choice("shares", "smoothing_years")),
        "decomposition": DecompositionParams(
            choice("decomposition", "form"),
            choice("decomposition", "capital_order"),
            choice("decomposition", "labour_order"),
        ),
    }


def as_choice(parameter: Parameter) -> Choice:
    """Return a parameter as a stage records it."""
    return Choice(parameter.name, parameter.value, parameter.file, parameter.line, parameter.citation)


def asset_sets(rules: AssetRules) -> Any:
    """Return the function from (asset, industry) to the parameters of its stocks, None without a rule."""

    @cache
    def of(asset: str, industry: str) -> MethodSet | None:
        rule = rules.resolve(asset, industry)
        if rule is None:
            return None
        return tuple(as_choice(p) for p in rule.parameters())

    return of
