// Chance: exact binomial probabilities, and draws that nobody can foresee.

// C(n, k) for k = 0 to n, exact.
function binomials(n) {
  const row = [1n];
  for (let k = 1; k <= n; k++) row.push((row[k - 1] * BigInt(n - k + 1)) / BigInt(k));
  return row;
}

// P(X >= correct) for somebody who guesses n times with even odds. The sum is exact; only the result is rounded.
function guessingProbability(correct, n) {
  const ways = binomials(n).slice(correct).reduce((sum, count) => sum + count, 0n);
  return Number(ways) / 2 ** n;
}

// The fewest correct answers of n whose probability by guessing is at most 1 - confidence; null where even n are
// too few.
function correctNeeded(n, confidence) {
  const limit = 1 - confidence + 1e-12;
  for (let correct = Math.ceil(n / 2); correct <= n; correct++) {
    if (guessingProbability(correct, n) <= limit) return correct;
  }
  return null;
}

// A whole number from 0 to below count, all equally likely: draws past the last full multiple are drawn again.
function drawLot(count) {
  const space = 2 ** 32;
  const word = new Uint32Array(1);
  do crypto.getRandomValues(word);
  while (word[0] >= space - (space % count));
  return word[0] % count;
}

// Fisher and Yates' shuffle, in place.
function shuffle(items) {
  for (let last = items.length - 1; last > 0; last--) {
    const other = drawLot(last + 1);
    [items[last], items[other]] = [items[other], items[last]];
  }
  return items;
}
