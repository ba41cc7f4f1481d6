// Light and dark: pictures are made in light colours, each of which has a dark counterpart under the same key.
const root = document.documentElement;
const darkMedia = window.matchMedia("(prefers-color-scheme: dark)");
let printing = false;

function isDark() {
  if (printing) return false;
  return root.dataset.theme ? root.dataset.theme === "dark" : darkMedia.matches;
}

const toDark = new Map(Object.entries(page.palette.light).map(([key, value]) => [value, page.palette.dark[key]]));
const hue = (key) => page.palette[isDark() ? "dark" : "light"][key];

function themed(value) {
  if (!isDark()) return value;
  if (typeof value === "string") return toDark.get(value) ?? value;
  if (Array.isArray(value)) return value.map(themed);
  if (value && typeof value === "object" && !ArrayBuffer.isView(value)) {
    return Object.fromEntries(Object.entries(value).map(([key, inner]) => [key, themed(inner)]));
  }
  return value;
}

function diverging() {
  const keys = ["below_3", "below_2", "below_1", "middle", "above_1", "above_2", "above_3"];
  return [0, 0.2, 0.38, 0.5, 0.62, 0.8, 1].map((place, i) => [place, page.palette.light[keys[i]]]);
}

function sequential() {
  return [0, 0.35, 0.7, 1].map((place, i) => [place, page.palette.light[`level_${i}`]]);
}
