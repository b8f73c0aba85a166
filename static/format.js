// How numbers are written: as many digits as the bound supports, a real minus sign, never a bare NaN.

export const MOST_DIGITS = 12;

export function plain(value, digits = 10) {
  if (value === null || value === undefined) return "–";
  if (Number.isInteger(value)) return minus(String(value));
  let text = Number(value.toPrecision(digits)).toString();
  return minus(text);
}

function minus(text) {
  return text.replace(/-/g, "−");
}

// one significant digit, rounded up: a bound may only grow when it is shortened
export function bound(error) {
  if (error === null || error === undefined) return null;
  if (error === 0) return "0";
  const power = Math.floor(Math.log10(error));
  let digit = Math.ceil(error / 10 ** power - 1e-9);
  let exponent = power;
  if (digit === 10) {
    digit = 1;
    exponent += 1;
  }
  if (exponent >= -3 && exponent <= 2) return minus(Number(`${digit}e${exponent}`).toString());
  return minus(`${digit}e${exponent}`);
}

// digits after the decimal point that a bound leaves meaningful
export function supported(value, error, most = MOST_DIGITS) {
  if (value === null || value === undefined) return "–";
  if (value === 0) return "0";
  if (!error || !(error > 0)) return plain(value, Math.min(10, most));
  const size = Math.abs(value) > 0 ? Math.floor(Math.log10(Math.abs(value))) : 0;
  const decimals = Math.min(-Math.floor(Math.log10(error)), most - 1 - size);
  if (decimals < 0) return plain(value, Math.max(1, size + 1 + decimals));
  if (size < -5) return minus(value.toExponential(Math.max(0, Math.min(most, decimals + size))));
  return minus(value.toFixed(Math.min(15, decimals)));
}

export function duration(seconds) {
  if (seconds === null || seconds === undefined) return "";
  if (seconds < 1.5) return "about a second left";
  if (seconds < 90) return `about ${Math.round(seconds)} s left`;
  return `about ${Math.round(seconds / 60)} min left`;
}
