"""The contract as data: models of the files in ``spec/``, look-ups, and what is generated from them."""

from protobench.contract.condition import Condition, ConditionError, parse_condition
from protobench.contract.kinds import Enumeration, Field, Kind, Record, RecordField
from protobench.contract.load import load_contract, spec_root
from protobench.contract.model import Contract
from protobench.contract.problems import ContractError, Problem
from protobench.contract.states import DECLARED, Cell, State, StateTable
from protobench.contract.tables import Capability, Clause, Drop, Fault, Limit, Refusal

__all__ = [
    "DECLARED",
    "Capability",
    "Cell",
    "Clause",
    "Condition",
    "ConditionError",
    "Contract",
    "ContractError",
    "Drop",
    "Enumeration",
    "Fault",
    "Field",
    "Kind",
    "Limit",
    "Problem",
    "Record",
    "RecordField",
    "Refusal",
    "State",
    "StateTable",
    "load_contract",
    "parse_condition",
    "spec_root",
]
