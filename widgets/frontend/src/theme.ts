/**
 * The host says its theme on an ancestor (data-jp-theme-light). Elsewhere the ground is measured once
 * and the same attribute is set on the root.
 */
export function settleTheme(root: HTMLElement): void {
  if (root.parentElement?.closest("[data-jp-theme-light]")) {
    root.removeAttribute("data-jp-theme-light");
    return;
  }
  root.setAttribute("data-jp-theme-light", String(groundLuminance(root.parentElement) > 0.4));
}

function groundLuminance(start: Element | null): number {
  for (let node = start; node; node = node.parentElement) {
    const numbers = getComputedStyle(node).backgroundColor.match(/[\d.]+/g)?.map(Number) ?? [];
    const [r = 0, g = 0, b = 0, a = numbers.length === 3 ? 1 : 0] = numbers;
    if (a > 0.5) return 0.2126 * linear(r) + 0.7152 * linear(g) + 0.0722 * linear(b);
  }
  return matchMedia("(prefers-color-scheme: dark)").matches && getComputedStyle(document.documentElement)
    .colorScheme.includes("dark") ? 0 : 1;
}

/** sRGB channel 0..255 to linear light (IEC 61966-2-1). */
function linear(channel: number): number {
  const c = channel / 255;
  return c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4;
}
