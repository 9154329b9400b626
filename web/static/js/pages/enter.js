import { find } from "./elements.js";
import { openPage } from "./shell.js";

openPage();
find(document, "theme-choice").closest("header").querySelector("nav").hidden = true;
