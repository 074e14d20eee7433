"""Statistics of the bars of one sitting, and the picture of them. Pure but for the picture's file."""
