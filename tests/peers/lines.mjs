// Orders come as JSON lines on the standard input, answers go out as JSON lines; the end of the input ends all.
import { createInterface } from "node:readline";

// Whole numbers of 64 bits come as objects of their own; none here needs more digits than a double has.
const plain = (_key, value) =>
  value !== null && typeof value === "object" && "low" in value && "high" in value ? Number(value.toString()) : value;

export const say = (answer) => process.stdout.write(JSON.stringify(answer, plain) + "\n");

export async function follow(carryOut) {
  for await (const line of createInterface({ input: process.stdin })) {
    say(await carryOut(JSON.parse(line)));
  }
}
