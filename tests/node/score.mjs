// Scores the cases of a JSON file by a scorer file: node score.mjs scorer.onnx cases.json
// A case: the leaf table's arrays by name, `remaining`, and where the file asks for it `horizon` or `batch_size`. Prints one JSON line of outputs a case.
import { readFile } from "node:fs/promises";
import * as ort from "onnxruntime-web";

ort.env.wasm.numThreads = 1;

const [, , scorer, casesFile] = process.argv;
const session = await ort.InferenceSession.create(await readFile(scorer));
const cases = JSON.parse(await readFile(casesFile, "utf8"));

function tensor(name, value) {
    if (name === "action") return new ort.Tensor("int64", BigInt64Array.from(value, BigInt), [value.length]);
    if (["remaining", "horizon", "batch_size"].includes(name)) {
        return new ort.Tensor("float64", Float64Array.of(value === "inf" ? Infinity : value), []);
    }
    return new ort.Tensor("float64", Float64Array.from(value), [value.length]);
}

for (const inputs of cases) {
    const feeds = Object.fromEntries(Object.entries(inputs).map(([name, value]) => [name, tensor(name, value)]));
    const answer = await session.run(feeds);
    const plain = Object.fromEntries(
        Object.entries(answer).map(([name, out]) => [name, Array.from(out.data, Number)]),
    );
    console.log(JSON.stringify(plain));
}
