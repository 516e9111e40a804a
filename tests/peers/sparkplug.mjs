// A Sparkplug client: node sparkplug.mjs PORT GROUP. Says every message of the group; publishes what it is told to.
import mqtt from "mqtt";
import sparkplug from "sparkplug-payload";
import wire from "sparkplug-payload/lib/sparkplugPayloadProto.js";
import { follow, say } from "./lines.mjs";

const [port, group] = process.argv.slice(2);
const sparkplugB = sparkplug.get("spBv1.0");
const { Payload } = wire.org.eclipse.tahu.protobuf;
const types = new Map(); // alias -> datatype, as the births named them

function read(bytes) {
  // Data leaves the type to the birth, and this library reads no value without one.
  const payload = Payload.decode(bytes);
  for (const metric of payload.metrics) {
    if (metric.name) types.set(Number(metric.alias), metric.datatype);
    else metric.datatype = types.get(Number(metric.alias));
  }
  return sparkplugB.decodePayload(Payload.encode(payload).finish());
}

const client = await mqtt.connectAsync(`mqtt://127.0.0.1:${port}`, { clientId: "peer", protocolVersion: 4 });
client.on("message", (topic, bytes, packet) => say({ topic, retain: packet.retain, ...read(bytes) }));
await client.subscribeAsync(`spBv1.0/${group}/#`, { qos: 1 });
say({ up: true });
await follow(async ({ topic, payload }) => {
  await client.publishAsync(topic, Buffer.from(sparkplugB.encodePayload(payload)), { qos: 1 });
  return { done: topic };
});
await client.endAsync();
