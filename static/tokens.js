// Puts colours and sizes of the stylesheet in the place of a figure's tokens.

const probe = document.createElement("span");
probe.hidden = true;
document.body.append(probe);

function colour(name) {
  probe.style.color = `var(--${name})`;
  return getComputedStyle(probe).color;
}

function translucent(rgb, share) {
  const parts = rgb.match(/[\d.]+/g).slice(0, 3);
  return `rgba(${parts.join(",")},${share})`;
}

export function size(name) {
  return Number(getComputedStyle(document.documentElement).getPropertyValue(`--${name}`));
}

export function resolver() {
  const known = new Map();
  const look = (token) => {
    if (known.has(token)) return known.get(token);
    const [name, share] = token.slice("token:".length).split("/");
    let value;
    if (name.startsWith("size-")) value = size(name);
    else if (name.startsWith("font-")) value = getComputedStyle(document.documentElement).getPropertyValue(`--${name}`).trim();
    else value = share === undefined ? colour(name) : translucent(colour(name), share);
    known.set(token, value);
    return value;
  };
  const resolve = (item) => {
    if (typeof item === "string") return item.startsWith("token:") ? look(item) : item;
    // rows of numbers are left alone, but the steps of a colour scale are pairs of a number and a token
    if (Array.isArray(item)) return typeof item.at(-1) === "number" || item.at(-1) === null ? item : item.map(resolve);
    if (item && typeof item === "object") {
      return Object.fromEntries(Object.entries(item).map(([key, value]) => [key, resolve(value)]));
    }
    return item;
  };
  return resolve;
}
