// The player's bar: at the foot of the window, as long as the player itself is out of sight.

class Bar {
  constructor(page) {
    this.page = page;
    this.box = byId("bar");
    this.playerInSight = true;
    this.buttons = page.data.candidates.map(({ label }, index) => element("button",
      { type: "button", "aria-label": `${index + 1} ${label}`, click: () => page.choose(index) }, element("span", {}, String(index + 1)), swatch(index)));
    byId("bar-candidates").append(...this.buttons);
    byId("bar-play").addEventListener("click", () => page.toggle());
    this.box.addEventListener("focusout", ({ relatedTarget }) => this.follow(this.box.contains(relatedTarget)));
    new IntersectionObserver(([{ isIntersecting }]) => {
      this.playerInSight = isIntersecting;
      this.follow();
    }).observe(byId("transport"));
    this.show();
  }

  show() {
    const { chosen, data } = this.page;
    this.buttons.forEach((button, index) => button.setAttribute("aria-pressed", String(index === chosen)));
    byId("bar-name").replaceChildren(named(`${chosen + 1} ${data.candidates[chosen].label}`));
    const { offsetLeft, offsetWidth } = this.buttons[chosen];
    byId("bar-candidates").scrollLeft = offsetLeft - (byId("bar-candidates").clientWidth - offsetWidth) / 2;
  }

  // While it has the focus it stays: what one is pressing must not go away.
  follow(isUsed = this.box.contains(document.activeElement)) {
    this.box.hidden = Boolean(this.page.blind?.round) || (this.playerInSight && !isUsed);
  }
}
