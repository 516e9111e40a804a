// An OPC UA client: node opcua.mjs URL. Reads values, properties and history of the nodes it is told.
import opcua from "node-opcua-client";
import { follow, say } from "./lines.mjs";

const client = opcua.OPCUAClient.create({
  endpointMustExist: false,
  connectionStrategy: { maxRetry: 5, initialDelay: 200, maxDelay: 1000 },
});
const shown = (dataValue) => ({
  value: dataValue.value?.value,
  type: dataValue.value ? opcua.DataType[dataValue.value.dataType] : null,
  status: dataValue.statusCode.name,
  time: dataValue.sourceTimestamp?.getTime() / 1000,
});

await client.connect(process.argv[2]);
const session = await client.createSession();
const uris = await session.readNamespaceArray();

async function property(nodeId, name) {
  const path = opcua.makeBrowsePath(nodeId, `.${name}`);
  const found = await session.translateBrowsePath(path);
  const target = found.targets[0].targetId;
  return (await session.read({ nodeId: target, attributeId: opcua.AttributeIds.Value })).value.value;
}

say({ up: true });
await follow(async ({ uri, names, from, to }) => {
  const answer = {};
  for (const name of names) {
    const nodeId = `ns=${uris.indexOf(uri)};s=${name}`;
    const node = { ...shown(await session.read({ nodeId, attributeId: opcua.AttributeIds.Value })) };
    if (node.type === "Float" || node.type === "Double") {
      const range = await property(nodeId, "EURange");
      const unit = await property(nodeId, "EngineeringUnits");
      node.range = [range.low, range.high];
      node.unit = { id: unit.unitId, uri: unit.namespaceUri, name: unit.displayName.text };
    }
    const past = await session.readHistoryValue(nodeId, new Date(from * 1000), new Date(to * 1000));
    node.history = past.historyData.dataValues.map(shown);
    answer[name] = node;
  }
  return answer;
});
await session.close();
await client.disconnect();
