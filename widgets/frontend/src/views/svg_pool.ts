import { makeSvg } from "../dom";

export type Tag = "path" | "line" | "text" | "rect" | "circle";

/** Nodes of one SVG group, reused by place; attributes are written only when they change. */
export class SvgPool {
  private nodes: { node: SVGElement; tag: Tag; values: Record<string, string | number>; title: string }[] = [];
  private used = 0;

  constructor(private readonly parent: SVGElement) {}

  begin(): void {
    this.used = 0;
  }

  put(tag: Tag, values: Record<string, string | number>, text = "", title = ""): void {
    let entry = this.nodes[this.used];
    if (!entry || entry.tag !== tag) {
      const node = makeSvg(tag);
      if (entry) entry.node.replaceWith(node);
      else this.parent.append(node);
      entry = { node, tag, values: {}, title: "" };
      this.nodes[this.used] = entry;
    }
    this.used++;
    const { node, values: old } = entry;
    for (const name in values) {
      const value = values[name] as string | number;
      if (old[name] !== value) node.setAttribute(name, String(value));
    }
    for (const name in old) if (!(name in values)) node.removeAttribute(name);
    entry.values = values;
    if (tag === "text" && node.textContent !== text) node.textContent = text;
    if (tag !== "text" && entry.title !== title) {
      entry.title = title;
      node.replaceChildren();
      if (title) {
        const child = makeSvg("title");
        child.textContent = title;
        node.append(child);
      }
    }
  }

  end(): void {
    while (this.nodes.length > this.used) this.nodes.pop()?.node.remove();
  }
}
