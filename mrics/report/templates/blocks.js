// Image blocks: base-85 text in the page -> whole numbers, decoded when first needed.

const study = JSON.parse(document.getElementById("study-data").textContent);
const decoded = new Map();

const digitOf = new Uint8Array(128);
[...study.digits].forEach((digit, value) => { digitOf[digit.charCodeAt(0)] = value; });

function bytesOf(text) {
  const words = new DataView(new ArrayBuffer(text.length / 5 * 4));
  for (let i = 0, at = 0; i < text.length; i += 5, at += 4) {
    let word = 0;
    for (let j = 0; j < 5; j += 1) word = word * 85 + digitOf[text.charCodeAt(i + j)];
    words.setUint32(at, word);
  }
  return new Uint8Array(words.buffer);
}

async function inflate(bytes) {
  const stream = new Blob([bytes]).stream().pipeThrough(new DecompressionStream("deflate"));
  return new Uint8Array(await new Response(stream).arrayBuffer());
}

async function decode(facts) {
  const text = document.getElementById(facts.block).textContent;
  const raw = await inflate(bytesOf(text).subarray(0, facts.size));
  const count = facts.bits === 8 ? raw.length : raw.length / 2;
  const numbers = new Int16Array(count);
  if (facts.bits === 8) {
    for (let i = 0; i < count; i += 1) numbers[i] = raw[i] + facts.offset;
  } else {
    for (let i = 0; i < count; i += 1) numbers[i] = raw[i] + 256 * raw[count + i] + facts.offset;
  }
  return numbers;
}

// Lattice numbers of a stack (Int16Array, slice after slice); a promise, kept.
function numbersOf(facts) {
  if (!decoded.has(facts.block)) decoded.set(facts.block, decode(facts));
  return decoded.get(facts.block);
}
