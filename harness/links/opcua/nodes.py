"""Create the nodes of a planned address space."""

from __future__ import annotations

from typing import TYPE_CHECKING

from asyncua import ua
from asyncua.ua.attribute_ids import AttributeIds
from asyncua.ua.object_ids import ObjectIds
from asyncua.ua.status_codes import StatusCodes

from harness.links.opcua.mapping import NAMESPACE_URI, UNITS_NAMESPACE, NodePlan, NodeType
from harness.links.opcua.stack import node_id, status, variant_type

if TYPE_CHECKING:
    from collections.abc import Sequence

    from asyncua.server.server import Server

_NOTHING_YET = status(StatusCodes.BadWaitingForInitialData)
_READ = ua.AccessLevel.CurrentRead.mask
_READ_WRITE = _READ | ua.AccessLevel.CurrentWrite.mask


async def build_nodes(
    server: Server, rig_name: str, plans: Sequence[NodePlan]
) -> tuple[ua.NodeId, ...]:
    """Create a folder for the rig and a variable in it for every plan.

    The type definition is named in the request for the node: the library's convenience
    functions would make every variable a plain one.

    Parameters
    ----------
    server : Server
        An initialised server that does not listen yet.
    rig_name : str
        Name of the folder.
    plans : sequence of NodePlan
        The variables.

    Returns
    -------
    tuple of NodeId
        One for each plan, in their order.
    """
    namespace = await server.register_namespace(NAMESPACE_URI)
    folder = _folder(namespace, rig_name)
    node_ids = []
    requests = [folder]
    for plan in plans:
        variable = _variable(namespace, folder.RequestedNewNodeId, plan)
        node_ids.append(variable.RequestedNewNodeId)
        requests.append(variable)
        requests += _analog_properties(namespace, plan)
    for result in await server.iserver.isession.add_nodes(requests):
        result.StatusCode.check()
    for variable_id in node_ids:
        answer = await server.iserver.aspace.write_attribute_value(
            variable_id, AttributeIds.Value, ua.DataValue(StatusCode=_NOTHING_YET)
        )
        answer.check()
    return tuple(node_ids)


def _folder(namespace: int, name: str) -> ua.AddNodesItem:
    attributes = ua.ObjectAttributes(
        DisplayName=ua.LocalizedText(name), Description=ua.LocalizedText("Points of the rig")
    )
    return ua.AddNodesItem(
        ParentNodeId=node_id(ObjectIds.ObjectsFolder),
        ReferenceTypeId=node_id(ObjectIds.Organizes),
        # A slash keeps the folder's identifier apart from that of any point.
        RequestedNewNodeId=node_id(f"rig/{name}", namespace),
        BrowseName=ua.QualifiedName(name, namespace),
        NodeClass=ua.NodeClass.Object,
        NodeAttributes=attributes,
        TypeDefinition=node_id(ObjectIds.FolderType),
    )


def _variable(namespace: int, parent: ua.NodeId, plan: NodePlan) -> ua.AddNodesItem:
    kind = variant_type(plan.data_type)
    access = _READ_WRITE if plan.writable else _READ
    attributes = ua.VariableAttributes(
        DisplayName=ua.LocalizedText(plan.name),
        Description=ua.LocalizedText(plan.description),
        Value=ua.Variant(0.0 if plan.data_type is NodeType.DOUBLE else 0, kind),
        DataType=node_id(kind.value),
        ValueRank=ua.ValueRank.Scalar,
        AccessLevel=access,
        UserAccessLevel=access,
        Historizing=False,
    )
    definition = (
        ObjectIds.BaseDataVariableType if plan.units is None else ObjectIds.AnalogUnitRangeType
    )
    return ua.AddNodesItem(
        ParentNodeId=parent,
        ReferenceTypeId=node_id(ObjectIds.HasComponent),
        RequestedNewNodeId=node_id(plan.name, namespace),
        BrowseName=ua.QualifiedName(plan.name, namespace),
        NodeClass=ua.NodeClass.Variable,
        NodeAttributes=attributes,
        TypeDefinition=node_id(definition),
    )


def _analog_properties(namespace: int, plan: NodePlan) -> list[ua.AddNodesItem]:
    """Return the two properties that the standard asks of an AnalogUnitRangeType."""
    if plan.units is None:
        return []
    limits = ua.Range(Low=plan.range.lower, High=plan.range.upper)
    units = ua.EUInformation(
        NamespaceUri=UNITS_NAMESPACE,
        UnitId=plan.units.unit_id,
        DisplayName=ua.LocalizedText(plan.units.symbol),
        Description=ua.LocalizedText(plan.units.description),
    )
    return [
        _property(namespace, plan.name, "EURange", limits, ObjectIds.Range),
        _property(namespace, plan.name, "EngineeringUnits", units, ObjectIds.EUInformation),
    ]


def _property(
    namespace: int, owner: str, name: str, value: ua.Range | ua.EUInformation, data_type: int
) -> ua.AddNodesItem:
    attributes = ua.VariableAttributes(
        DisplayName=ua.LocalizedText(name),
        Description=ua.LocalizedText(name),
        Value=ua.Variant(value, ua.VariantType.ExtensionObject),
        DataType=node_id(data_type),
        ValueRank=ua.ValueRank.Scalar,
    )
    return ua.AddNodesItem(
        ParentNodeId=node_id(owner, namespace),
        ReferenceTypeId=node_id(ObjectIds.HasProperty),
        RequestedNewNodeId=node_id(f"{owner}/{name}", namespace),
        BrowseName=ua.QualifiedName(name, 0),  # the standard's names live in its namespace
        NodeClass=ua.NodeClass.Variable,
        NodeAttributes=attributes,
        TypeDefinition=node_id(ObjectIds.PropertyType),
    )
