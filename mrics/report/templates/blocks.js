// Image blocks: base64 text in the page -> whole numbers, decoded when first needed.

const study = JSON.parse(document.getElementById("study-data").textContent);
const decoded = new Map();

function bytesOf(text) {
  if (Uint8Array.fromBase64) return Uint8Array.fromBase64(text);
  const plain = atob(text);
  const bytes = new Uint8Array(plain.length);
  for (let i = 0; i < plain.length; i += 1) bytes[i] = plain.charCodeAt(i);
  return bytes;
}

async function inflate(bytes) {
  const stream = new Blob([bytes]).stream().pipeThrough(new DecompressionStream("deflate"));
  return new Uint8Array(await new Response(stream).arrayBuffer());
}

async function decode(facts) {
  const raw = await inflate(bytesOf(document.getElementById(facts.block).textContent));
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
